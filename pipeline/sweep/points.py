"""Which points a sweep has: a grid or a list of settings, over one recording or several, once or for several seeds."""

import itertools
import math
import tomllib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from cameras.faults import InputFault, printable
from pipeline.sweep.case import digest
from pipeline.sweep.settings import COMMAND_LINE, Value, check_name, check_values

Row = tuple[tuple[str, Value], ...]  # settings by name
MOST_POINTS = 1_000_000
MOST_BYTES = 4 * 1024 * 1024


@dataclass(frozen=True)
class Point:
    """One replay to be done: a recording (its number among the cases), settings by name, and how parts arrive.

    seed None: as recorded; otherwise parts are drawn anew over length_s seconds.
    """

    recording: int
    settings: Row
    seed: int | None = None
    length_s: float = 0.0

    def key(self, case_digest: str) -> str:
        """Under which the result is kept: a hash of all that goes in."""
        return digest(case_digest, sorted(self.settings), self.seed, self.length_s if self.seed is not None else 0.0)

    def told(self) -> str:
        """The point in words."""
        seed = [] if self.seed is None else [f"seed {self.seed}"]
        return ", ".join([f"{name} {value}" for name, value in self.settings] + seed) or "as it is"


def grid(values: Mapping[str, Sequence[Value]]) -> list[Row]:
    """Every combination of the values of each setting, the last one changing fastest."""
    if math.prod(len(one) for one in values.values()) > MOST_POINTS:
        raise InputFault(COMMAND_LINE, "", f"more than {MOST_POINTS} points", "give fewer values")
    return [tuple(zip(values, row, strict=True)) for row in itertools.product(*values.values())]


def points_of(settings: Iterable[Row], recordings: int, seeds: Sequence[int] = (),
              length_s: float = 0.0) -> list[Point]:
    """A point for each of the settings, recordings and seeds; no seeds: parts arrive as recorded."""
    drawn: Sequence[int | None] = seeds or (None,)
    return [Point(recording, tuple(one), seed, length_s)
            for one in settings for recording in range(recordings) for seed in drawn]


def parsed(text: str) -> tuple[str, list[Value]]:
    """`NAME=v1,v2,…` or `NAME=from:to:steps` as name and values. Raises InputFault."""
    name, equals, given = text.partition("=")
    if not equals or not given.strip():
        raise InputFault(COMMAND_LINE, printable(text), "no values", "write NAME=v1,v2 or NAME=from:to:steps")
    name = name.strip()
    check_name(name)
    parts = [part.strip() for part in given.split(":")]
    if len(parts) == 3 and all(isinstance(_value(part), (int, float)) for part in parts):
        return name, _steps(name, *(float(part) for part in parts))
    values = [_value(part.strip()) for part in given.split(",")]
    if any(value == "" or (isinstance(value, float) and not math.isfinite(value)) for value in values):
        raise InputFault(COMMAND_LINE, printable(text), "a value is empty or not finite", "write NAME=v1,v2")
    check_values(name, values)
    return name, values


def read_settings(path: Path) -> list[Row]:
    """Settings from a TOML file: `[set]` with a list or {from, to, steps} a setting is a grid; `[[points]]` a list.

    Raises InputFault naming file and key.
    """
    raw = _read_toml(path)
    strange = sorted(set(raw) - {"set", "points"})
    if strange or not raw:
        raise InputFault(path, printable(strange[0]) if strange else "", "unknown table" if strange else "nothing set",
                         "write [set] or [[points]]")
    axes, listed = raw.get("set", {}), raw.get("points", [])
    if not isinstance(axes, dict) or not isinstance(listed, list) or not all(isinstance(one, dict) for one in listed):
        raise InputFault(path, "", "[set] is no table, or [[points]] no list of tables", "write [set] or [[points]]")
    values = {name: _axis(path, name, given) for name, given in _flat(axes, listed_ones=False)}
    rows = [tuple(_flat(one, listed_ones=True)) for one in listed]
    for name, value in itertools.chain.from_iterable(rows):
        check_name(name, str(path))
        _axis(path, name, [value])
    return (grid(values) if values else []) + rows


def _read_toml(path: Path) -> dict[str, Any]:
    try:
        if path.stat().st_size > MOST_BYTES:
            raise InputFault(path, "", "larger than 4 MB", "give a settings file")
        return tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except FileNotFoundError:
        raise InputFault(path, "", "no such file", "check the path") from None
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputFault(path, "", f"not a TOML file ({printable(error)})", "correct the line") from None


def _flat(table: Mapping[str, Any], listed_ones: bool, before: str = "") -> list[tuple[str, Any]]:
    """Names with their values; TOML reads `motion.grasp_s = …` as a table in a table."""
    found: list[tuple[str, Any]] = []
    for name, value in table.items():
        span = not listed_ones and isinstance(value, dict) and set(value) <= {"from", "to", "steps"}
        if isinstance(value, dict) and not span:
            found += _flat(value, listed_ones, f"{before}{name}.")
        else:
            found.append((before + name, value))
    return found


def _axis(path: Path, name: str, given: Any) -> list[Value]:
    check_name(name, str(path))
    if isinstance(given, dict):
        try:
            return _steps(name, float(given["from"]), float(given["to"]), float(given["steps"]))
        except (KeyError, TypeError, ValueError):
            raise InputFault(path, printable(name), "no span", "write { from = 1.0, to = 2.0, steps = 5 }") from None
    values = given if isinstance(given, list) else [given]
    if not values or not all(isinstance(v, (int, float, str)) and not isinstance(v, bool) for v in values) \
            or not all(math.isfinite(v) for v in values if not isinstance(v, str)):
        raise InputFault(path, printable(name), "no list of numbers or words", "write [v1, v2]")
    check_values(name, values, str(path))
    return list(values)


def _steps(name: str, start: float, end: float, steps: float) -> list[Value]:
    """Evenly from start to end, both included; whole numbers where all of them are."""
    if not (math.isfinite(start) and math.isfinite(end) and 2 <= steps <= MOST_POINTS and steps == int(steps)):
        raise InputFault(COMMAND_LINE, printable(name), "no span", "write from:to:steps, with 2 steps or more")
    many = int(steps)
    values = [round(start + (end - start) * k / (many - 1), 12) for k in range(many)]
    whole = all(value == int(value) for value in values)
    return [int(value) if whole else value for value in values]


def _value(text: str) -> Value:
    for read in (int, float):
        try:
            return read(text)
        except ValueError:
            continue
    return text
