"""CSV files in: columns checked one by one, and a fault named by file, row and column."""

import csv
import math
from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cameras.faults import InputFault, printable

Column = NDArray[np.float64] | NDArray[np.int64] | NDArray[np.str_]
MOST_BYTES = 512 * 1024 * 1024


def read_columns(
    path: Path, required: Mapping[str, type], optional: Mapping[str, type] | None = None
) -> dict[str, Column]:
    """Columns of a CSV file as arrays of one length: int, float or str as asked; an absent optional one is left out.

    A column `line` (int) is added: the line of the file each row stands on. Raises InputFault for a file that cannot
    be read, a missing or doubled column, a row of another length, text where a number belongs, a number not finite.
    """
    header, rows, lines = _read_rows(path)
    missing = [name for name in required if name not in header]
    if missing and any(";" in name or "\t" in name for name in header):
        raise InputFault(path, "line 1", "columns are not parted by commas",
                         "save it with commas between columns and points in numbers")
    if missing:
        raise InputFault(path, "line 1", f"no column {', '.join(missing)}",
                         f"the header must name {', '.join(required)}")
    doubled = sorted({name for name in header if header.count(name) > 1})
    if doubled:
        raise InputFault(path, "line 1", f"column {doubled[0]} stands twice", "keep one of them")
    for row, line in zip(rows, lines, strict=True):
        if len(row) != len(header):
            raise InputFault(path, f"line {line}", f"{len(row)} values for {len(header)} columns",
                             "give every row one value a column, with points in numbers")
    table: dict[str, Column] = {"line": np.array(lines, dtype=np.int64)}
    for name, kind in {**required, **(optional or {})}.items():
        if name in header:
            at = header.index(name)
            table[name] = _column(path, name, kind, [row[at].strip() for row in rows], lines)
    return table


def _read_rows(path: Path) -> tuple[list[str], list[list[str]], list[int]]:
    try:
        if path.stat().st_size > MOST_BYTES:
            raise InputFault(path, "", f"larger than {MOST_BYTES >> 20} MB", "split the recording")
        with open(path, newline="", encoding="utf-8-sig") as file:
            reader = csv.reader(file)
            rows, lines = [], []
            for row in reader:
                if any(cell.strip() for cell in row):
                    rows.append(row)
                    lines.append(reader.line_num)
    except FileNotFoundError:
        raise InputFault(path, "", "no such file", "check the path") from None
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise InputFault(path, "", f"cannot be read ({printable(error)})", "give a CSV file in UTF-8") from None
    if not rows:
        raise InputFault(path, "", "empty, not even a header", "start with a line that names the columns")
    return [name.strip() for name in rows[0]], rows[1:], lines[1:]


def _column(path: Path, name: str, kind: type, texts: list[str], lines: list[int]) -> Column:
    if kind is str:
        return np.array(texts, dtype=np.str_)
    values = np.empty(len(texts))
    for k, (text, line) in enumerate(zip(texts, lines, strict=True)):
        try:
            values[k] = float(text)
        except ValueError:
            raise InputFault(path, f"line {line}, {name}", f"{printable(text)!r} is not a number",
                             "write a plain number") from None
        if not math.isfinite(values[k]):
            raise InputFault(path, f"line {line}, {name}", f"{printable(text)} is not finite", "write a plain number")
        if kind is int and (values[k] != round(values[k]) or abs(values[k]) > 2**53):
            raise InputFault(path, f"line {line}, {name}", f"{printable(text)} is not a whole number",
                             "write a whole number")
    return values.astype(np.int64) if kind is int else values
