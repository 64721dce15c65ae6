"""A folder to start one's own cell from: a commented cell file, and tables with headers and no rows."""

import json
from importlib.resources import files
from pathlib import Path

from cameras.faults import InputFault
from cameras.written import written_whole

TABLES = {
    "calibration/touches.csv": "u_px,v_px,counts,x_mm,y_mm,z_mm,touch_counts",
    "calibration/belt_touches.csv": "mark,counts,x_mm,y_mm",
    "moves.csv": "j1_from,j2_from,j3_from,j4_from,j1_to,j2_to,j3_to,j4_to,time_s",
    "recording/frames.csv": "frame,file,time_s,counts",
}
FOLDERS = ("calibration/lens", "teach", "parts", "recording")


def new_cell(folder: Path) -> list[Path]:
    """Lay out a cell's folder; the files written. Raises InputFault, and writes nothing, where any of them is there."""
    texts = {"cell.toml": _cell_text(folder.resolve().name)} | {name: head + "\n" for name, head in TABLES.items()}
    for name in texts:
        if (folder / name).exists():
            raise InputFault(folder / name, "", "is there already", "name another folder, or move it away")
    if folder.exists() and not folder.is_dir():
        raise InputFault(folder, "", "is a file", "name another folder")
    for name in FOLDERS:
        _made(folder / name)
    for name, text in texts.items():
        with written_whole(folder / name) as part:
            part.write_text(text, encoding="utf-8")
    return [folder / name for name in texts]


def _cell_text(name: str) -> str:
    """The template under a name; a JSON string is a TOML string too, but for lone surrogates and DEL."""
    shown = "".join(c if c.isprintable() else "?" for c in name)
    text = files("pipeline").joinpath("new_cell.toml").read_text(encoding="utf-8")
    return text.replace("@NAME@", json.dumps(shown, ensure_ascii=False))


def _made(folder: Path) -> None:
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputFault(folder, "", f"cannot be made ({error.strerror})", "choose another place") from None
