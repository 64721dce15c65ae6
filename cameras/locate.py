"""Detections to sightings in the cell frame: a finder's pixels through the camera's map, or a table made elsewhere."""

import difflib
from collections.abc import Collection, Mapping
from pathlib import Path
from typing import Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from cameras.columns import Column, read_columns
from cameras.faults import InputFault, printable
from cameras.recording import Recording
from cameras.sightings import Sightings

FloatArray = NDArray[np.float64]
Rows = NDArray[np.int64]

SIGMA_PX = 0.3  # what a detection made elsewhere is taken to be good for, unless its table says otherwise
SIGMA_MM = 0.3
SIGMA_DEG = 0.5
UNRECOGNISED = "unknown"  # as good as an empty name, where no kind is called that
FARTHEST_MM = 1e6
FARTHEST_PX = 1e6


class ToCell(Protocol):
    """What locating needs of a calibrated camera."""

    def to_cell(self, pixels: ArrayLike, height_mm: ArrayLike | None = None) -> FloatArray:
        """Cell points (..., 2) at a height (default: the calibrated plane) seen at pixels (..., 2); NaN for none."""


def poses_in_cell(
    camera: ToCell, pixels: FloatArray, angles_rad: FloatArray, heights_mm: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Cell points (n, 2) and yaws (n,) of poses seen at pixels (n, 2), and mm per pixel there (n,).

    angles_rad (n,) run from +u towards -v, in the raw image; heights_mm (n,) is z in the cell frame, NaN the calibrated
    plane. Yaw is that of the line between the cell points seen half a pixel before and behind.
    """
    half = 0.5 * np.stack([np.cos(angles_rad), -np.sin(angles_rad)], axis=-1)
    across = half[:, ::-1] * [1.0, -1.0]
    seen = np.stack([pixels, pixels - half, pixels + half, pixels - across, pixels + across])
    plane = np.isnan(heights_mm)
    points = np.empty(seen.shape)
    points[:, plane] = camera.to_cell(seen[:, plane])
    points[:, ~plane] = camera.to_cell(seen[:, ~plane], heights_mm[~plane])
    along, aside = points[2] - points[1], points[4] - points[3]
    mm_per_px = np.sqrt(np.abs(along[:, 0] * aside[:, 1] - along[:, 1] * aside[:, 0]))
    return points[0], np.arctan2(along[:, 1], along[:, 0]), mm_per_px


def read_detections(
    path: str | Path, recording: Recording, cameras: Mapping[str, ToCell], heights_mm: Mapping[str, float]
) -> Sightings:
    """Sightings from `frame,part,u_px,v_px,angle_deg,score[,side][,sigma_px][,sigma_deg]`: grip frames in raw images.

    cameras: the map of each camera the recording names ("" where it names none). heights_mm: of the face that is seen,
    z in the cell frame, for each kind; an empty or `unknown` part is a thing not recognised, at heights_mm[""] or in
    the calibrated plane. A part not among the kinds is refused: it would be followed and never gripped. Without `side`
    all lie up; sigmas default to SIGMA_PX and SIGMA_DEG. Raises InputFault naming file and line.
    """
    path = Path(path)
    columns = {"frame": int, "part": str, "u_px": float, "v_px": float, "angle_deg": float, "score": float}
    table = read_columns(path, columns, {"side": str, "sigma_px": float, "sigma_deg": float})
    rows, kinds = _checked(path, table, recording, [kind for kind in heights_mm if kind])
    pixels = np.stack([table["u_px"], table["v_px"]], axis=-1).astype(float)
    _refuse(path, table, np.abs(pixels).max(axis=1, initial=0.0) > FARTHEST_PX, "u_px", "is far outside any image",
            "correct the pixel")
    heights = np.array([heights_mm.get(str(kind), np.nan) for kind in kinds], dtype=float)
    angles = np.radians(table["angle_deg"].astype(float))
    xy, yaw, mm_per_px = np.full((len(rows), 2), np.nan), np.zeros(len(rows)), np.ones(len(rows))
    for name in np.unique(recording.cameras[rows]):
        of_camera = recording.cameras[rows] == name
        if name not in cameras:
            _refuse(path, table, of_camera, "frame", f"is of camera {printable(name)!r}, which has no calibration",
                    "give that camera in the cell file its calibration")
        xy[of_camera], yaw[of_camera], mm_per_px[of_camera] = poses_in_cell(
            cameras[str(name)], pixels[of_camera], angles[of_camera], heights[of_camera])
    away = ~np.isfinite(xy).all(axis=1) | ~np.isfinite(yaw)
    _refuse(path, table, away, "u_px", "and v_px meet no point of the cell", "correct the pixel, or the calibration")
    sigma_px = _sigmas(path, table, "sigma_px", SIGMA_PX)
    return _sightings(path, table, rows, kinds, xy, yaw, sigma_px * mm_per_px)


def read_located(path: str | Path, recording: Recording, kinds: Collection[str]) -> Sightings:
    """Sightings from `frame,part,x_mm,y_mm,yaw_deg,score[,side][,sigma_mm][,sigma_deg]`: poses in the cell frame.

    Each pose is at the counts of its frame. An empty or `unknown` part is a thing not recognised; a part not among
    `kinds` is refused. Without `side` all lie up; sigmas default to SIGMA_MM and SIGMA_DEG. Raises InputFault naming
    file and line.
    """
    path = Path(path)
    columns = {"frame": int, "part": str, "x_mm": float, "y_mm": float, "yaw_deg": float, "score": float}
    table = read_columns(path, columns, {"side": str, "sigma_mm": float, "sigma_deg": float})
    rows, named = _checked(path, table, recording, kinds)
    xy = np.stack([table["x_mm"], table["y_mm"]], axis=-1).astype(float)
    _refuse(path, table, np.abs(xy).max(axis=1, initial=0.0) > FARTHEST_MM, "x_mm", "and y_mm lie outside any cell",
            "give millimetres in the cell frame, at the frame's counts")
    yaw = np.radians(table["yaw_deg"].astype(float))
    return _sightings(path, table, rows, named, xy, yaw, _sigmas(path, table, "sigma_mm", SIGMA_MM))


def _checked(path: Path, table: dict[str, Column], recording: Recording, kinds: Collection[str]) -> tuple[Rows, Column]:
    """Rows of the recording, and kinds, of a table whose frames, parts, sides and scores are all good."""
    rows = recording.row_of(table["frame"])
    _refuse(path, table, rows < 0, "frame", "is not in frames.csv", "use the numbers of its column frame")
    named = table["part"]
    if UNRECOGNISED not in kinds:
        named = np.where(named == UNRECOGNISED, "", named)
    strange = ~np.isin(named, ["", *kinds])
    if strange.any():
        near = difflib.get_close_matches(str(named[strange][0]), list(kinds), n=1, cutoff=0.0)
        known = f"did you mean {printable(near[0])!r}? Known: {', '.join(map(printable, kinds))}" if near else \
            "describe it in the cell file"
        _refuse(path, table, strange, "part", "is no part of this cell", known)
    if "side" in table:
        _refuse(path, table, ~np.isin(table["side"], ["up", "down", ""]), "side", "is no side",
                "write up, down, or nothing where not known")
    score = table["score"].astype(float)
    _refuse(path, table, (score < 0) | (score > 1), "score", "is no score", "give a share of 0 to 1")
    return rows, named


def _sightings(path: Path, table: dict[str, Column], rows: Rows, kinds: Column, xy_mm: FloatArray, yaw_rad: FloatArray,
               sigma_mm: FloatArray) -> Sightings:
    """The columns as sightings, in order of the recording's rows."""
    sides = table["side"] if "side" in table else np.full(len(rows), "up")
    sigma_rad = np.radians(_sigmas(path, table, "sigma_deg", SIGMA_DEG))
    order = np.argsort(rows, kind="stable")
    wrapped = np.arctan2(np.sin(yaw_rad), np.cos(yaw_rad))
    return Sightings(
        row=rows[order], kind=kinds[order].astype(np.str_), side=sides[order].astype(np.str_), xy_mm=xy_mm[order],
        yaw_rad=wrapped[order], score=table["score"][order].astype(float), sigma_mm=sigma_mm[order],
        sigma_rad=sigma_rad[order], outline_mm=tuple(np.zeros((0, 2)) for _ in rows),
    )  # fmt: skip


def _sigmas(path: Path, table: dict[str, Column], column: str, default: float) -> FloatArray:
    if column not in table:
        return np.full(len(table["line"]), default)
    sigma = table[column].astype(float)
    _refuse(path, table, (sigma < 1e-6) | (sigma > 1e3), column, "is no standard deviation", "give one above 0")
    return sigma


def _refuse(
    path: Path, table: dict[str, Column], wrong: NDArray[np.bool_], column: str, fault: str, remedy: str
) -> None:
    """Raise InputFault for the first of the rows (n,) marked wrong, naming its line and value."""
    if wrong.any():
        at = int(np.flatnonzero(wrong)[0])
        value = table[column][at]
        shown = repr(printable(value)) if value.dtype.kind == "U" else f"{value:.12g}"
        raise InputFault(path, f"line {table['line'][at]}, {column}", f"{shown} {fault}", remedy)
