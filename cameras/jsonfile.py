"""JSON files in: kind and version checked, keys known, numbers finite; a fault named by file and key."""

import json
from collections.abc import Collection
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cameras.faults import InputFault, printable

MOST_BYTES = 64 * 1024 * 1024


class JsonFile:
    """One JSON object, read and checked as it is asked for its keys."""

    def __init__(self, path: str | Path, kind: str, version: int, keys: Collection[str], writer: str) -> None:
        """Read `path`, an object with `kind` and `format` as given and no keys but `keys`.

        `writer` is the command that makes such a file. Raises InputFault for anything else.
        """
        self.path, self.writer = Path(path), writer
        self.values = self._read()
        if self.values.get("kind") != kind:
            raise self.fault("kind", f"is {self._shown('kind')}, not {kind!r}")
        if self.values.get("format") != version:
            raise self.fault("format", f"is {self._shown('format')}; this version reads {version}")
        unknown = sorted(set(self.values) - {"kind", "format", *keys})
        if unknown:
            raise self.fault(unknown[0], f"unknown key (known: {', '.join(sorted(keys))})")

    def fault(self, key: str, fault: str) -> InputFault:
        """What is wrong at this key, with the way to mend it."""
        return InputFault(self.path, key, fault, f"write the file anew with `{self.writer}`")

    def numbers(self, key: str, shape: tuple[int, ...]) -> NDArray[np.float64]:
        """Finite numbers of this shape; -1 stands for any length."""
        value = self._of(key)
        try:
            if not _all_numbers(value):
                raise self.fault(key, "holds something that is not a number")
            array = np.array(value, dtype=np.float64)
        except (ValueError, OverflowError, RecursionError):
            raise self.fault(key, "is ragged, or too large") from None
        if array.ndim != len(shape) or any(want not in (-1, n) for want, n in zip(shape, array.shape, strict=True)):
            raise self.fault(key, f"has shape {array.shape}, not {shape}")
        if not np.isfinite(array).all():
            raise self.fault(key, "is not finite")
        return array

    def number(self, key: str) -> float:
        """One finite number."""
        return float(self.numbers(key, ()))

    def text(self, key: str) -> str:
        """A string."""
        value = self._of(key)
        if not isinstance(value, str):
            raise self.fault(key, f"is {self._shown(key)}, not text")
        return value

    def _of(self, key: str) -> Any:
        if key not in self.values:
            raise self.fault(key, "missing")
        return self.values[key]

    def _shown(self, key: str) -> str:
        return printable(repr(self.values.get(key)), 60)

    def _read(self) -> dict[str, Any]:
        try:
            if self.path.stat().st_size > MOST_BYTES:
                raise InputFault(self.path, "", f"larger than {MOST_BYTES >> 20} MB", f"give a file by `{self.writer}`")
            values = json.loads(self.path.read_text(encoding="utf-8"))
        except FileNotFoundError:
            raise InputFault(self.path, "", "no such file",
                             f"check the path, or write it with `{self.writer}`") from None
        except (OSError, ValueError, RecursionError) as error:
            raise InputFault(self.path, "", f"not a JSON file ({printable(error, 80)})",
                             f"write the file anew with `{self.writer}`") from None
        if not isinstance(values, dict):
            raise self.fault("", "not a JSON object")
        return values


def _all_numbers(value: object) -> bool:
    if isinstance(value, list):
        return all(_all_numbers(one) for one in value)
    return isinstance(value, (int, float)) and not isinstance(value, bool)
