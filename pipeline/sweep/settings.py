"""The settings a sweep can change, and how each changes a cell or a recording."""

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, replace
from difflib import get_close_matches
from pathlib import Path
from typing import Any

import numpy as np

from cameras.faults import InputFault, printable
from pipeline.cell import Cell, cell_from
from pipeline.sweep.case import Case

Value = int | float | str
Raw = dict[str, Any]
COMMAND_LINE = "--set"


@dataclass(frozen=True)
class Knob:
    """A setting of the cell file under a short name. means: what its value is, with the unit."""

    means: str
    turn: Callable[[Raw, Value], None]


def _key(*path: str | int) -> Callable[[Raw, Value], None]:
    def put(raw: Raw, value: Value) -> None:
        inner: Any = raw
        for step in path[:-1]:
            inner = inner[step]
        inner[path[-1]] = value

    return put


def _limits(raw: Raw, value: Value) -> None:
    for joint in ("j1", "j2", "j3", "j4"):
        limits = raw["arm"][joint]
        for key in ("max_speed", "max_accel", "max_jerk"):
            limits[key] = None if limits[key] is None else limits[key] * _number("limits", value, positive=True)


def _window(raw: Raw, name: str) -> list[float]:
    if not raw["belt"] or raw["belt"]["window_mm"] is None:
        raise _fault(name, "the cell has no belt window", "give [belt] a window_mm, or leave this setting out")
    return list(raw["belt"]["window_mm"])


def _window_shift(raw: Raw, value: Value) -> None:
    raw["belt"]["window_mm"] = [edge + _number("window-shift", value) for edge in _window(raw, "window-shift")]


def _window_length(raw: Raw, value: Value) -> None:
    start, _ = _window(raw, "window-length")
    raw["belt"]["window_mm"] = [start, start + _number("window-length", value, positive=True)]


def _latency(raw: Raw, value: Value) -> None:
    if not raw["cameras"]:
        raw["cameras"].append({})
    for camera in raw["cameras"]:
        camera["latency_s"] = value


CELL: dict[str, Knob] = {
    "order": Knob("the policy: arrival, nearest or lookahead", _key("order", "policy")),
    "horizon": Knob("parts looked at together", _key("order", "horizon")),
    "limits": Knob("factor on every joint's speed, acceleration and jerk", _limits),
    "window-shift": Knob("mm by which both edges of the pick window move along the belt", _window_shift),
    "window-length": Knob("mm from grasp start to grasp end; the start stays", _window_length),
    "base-x": Knob("mm, x of the arm's base", _key("arm", "base_mm", 0)),
    "base-y": Knob("mm, y of the arm's base", _key("arm", "base_mm", 1)),
    "base-yaw": Knob("deg by which the base is turned", _key("arm", "base_yaw_deg")),
    "travel-height": Knob("mm, travel_mm", _key("motion", "travel_mm")),
    "clear-height": Knob("mm, clear_mm", _key("motion", "clear_mm")),
    "approach": Knob("mm, approach_mm", _key("motion", "approach_mm")),
    "grasp-dwell": Knob("s, grasp_s", _key("motion", "grasp_s")),
    "release-dwell": Knob("s, release_s", _key("motion", "release_s")),
    "latency": Knob("s, latency_s of every camera", _latency),
}
RECORDING = {
    "belt-speed": "factor on the belt's speed; the same parts lie on the belt, so they also come faster",
    "arrival-rate": "factor on the parts that come; the belt's speed stays, the gaps between parts change",
}
SEEN_BY = (".mm_per_count", ".heading_deg", ".counts_modulus", ".surface_mm", ".model", ".symmetry", ".height_mm",
           ".outline_mm", ".outline_radius_mm", ".calibration")  # what finding and following use


def with_unit(name: str) -> str:
    """A setting's name and what its values count."""
    if name in RECORDING:
        return f"{name}, times what was recorded"
    first = CELL[name].means.replace(",", " ").split()[0] if name in CELL else ""
    return f"{name}, {first}" if first in ("mm", "deg", "s", "factor", "parts") else name


def check_name(name: str, place: str = COMMAND_LINE) -> None:
    """Raise InputFault for a name that is neither a setting nor a key of the cell file."""
    if name in CELL or name in RECORDING or "." in name:
        return
    known = [*RECORDING, *CELL]
    near = get_close_matches(name, known, n=1, cutoff=0.5)
    raise InputFault(place, printable(name), "no such setting",
                     f"did you mean {near[0]}?" if near else f"there are {', '.join(known)}, and keys of the cell file "
                     "such as motion.grasp_s")


def check_values(name: str, values: Iterable[Value], place: str = COMMAND_LINE) -> None:
    """Raise InputFault for words where a setting takes numbers."""
    words = [value for value in values if isinstance(value, str)]
    if words and (name in RECORDING or (name in CELL and name != "order")):
        raise InputFault(place, printable(name), f"{printable(words[0])!r} is not a number",
                         "write NAME=v1,v2 or NAME=from:to:steps, with points in numbers")


def changed_cell(cell: Cell, settings: Mapping[str, Value]) -> Cell:
    """The cell under those of the settings that change a cell. Raises InputFault or CellError for what will not do."""
    ours = {name: value for name, value in settings.items() if name not in RECORDING}
    if not ours:
        return cell
    raw = _as_raw(cell.model_dump())
    if "horizon" not in cell.order.model_fields_set:
        del raw["order"]["horizon"]  # on a tray the cell's own choice differs from the default value
    for name, value in ours.items():
        check_name(name)
        if name in CELL:
            CELL[name].turn(raw, value)
        else:
            _put_key(raw, name, value)
    return cell_from(raw, cell.file)


def faster_belt(case: Case, factor: float) -> Case:
    """The same frames at the same counts in less time: what the belt brought, it brings `factor` times as fast."""
    if case.cell.belt is None:
        raise _fault("belt-speed", "the cell has no belt", "change arrival-rate: trays then come faster")
    return faster(case, _number("belt-speed", factor, positive=True))


def faster(case: Case, factor: float) -> Case:
    """A recording whose clock runs `factor` times as fast."""
    times = case.recording.times_s
    return replace(case, recording=replace(case.recording, times_s=times[0] + (times - times[0]) / factor))


def factor_of(settings: Mapping[str, Value], name: str) -> float:
    """The value of a setting of the recording; 1 where it is not set. Raises InputFault for what is no factor."""
    return _number(name, settings.get(name, 1.0), positive=True)


def _number(name: str, value: Value, positive: bool = False) -> float:
    if isinstance(value, str) or not np.isfinite(value) or (positive and value <= 0):
        raise _fault(name, f"{printable(value)!r} will not do", "give a number" + (" above 0" if positive else ""))
    return float(value)


def _as_raw(value: Any) -> Any:
    """Tables and lists that can be changed, from what pydantic hands out; keys without a value left in as None."""
    if isinstance(value, Mapping):
        return {key: _as_raw(one) for key, one in value.items() if not isinstance(one, Path)}
    return [_as_raw(one) for one in value] if isinstance(value, tuple) else value


def _put_key(raw: Raw, name: str, value: Value) -> None:
    """Set a key of the cell file by its path; numbers in it count entries from 0."""
    if name.endswith(SEEN_BY):
        raise _fault(name, "changes what is seen in the recording", "compare a cell file for each value")
    *path, last = name.split(".")
    inner: Any = raw
    try:
        for step in path:
            inner = inner[int(step)] if isinstance(inner, list) else inner[step]
        if isinstance(inner, list):
            inner[int(last)] = value
        elif isinstance(inner, dict):
            inner[last] = value
        else:
            raise KeyError(last)
    except (KeyError, ValueError, IndexError, TypeError):
        raise _fault(name, "the cell has no such key", "write its path, as motion.grasp_s, places.0.yaw_deg") from None


def _fault(name: str, fault: str, remedy: str) -> InputFault:
    return InputFault(COMMAND_LINE, printable(name), fault, remedy)
