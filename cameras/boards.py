"""Calibration boards in images: inner corners of chessboards and ChArUco boards, sub-pixel."""

from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.faults import InputFault, printable
from cameras.image import read_image

FloatArray = NDArray[np.float64]
_FEWEST_CORNERS = 6  # of a ChArUco board partly in view


@dataclass(frozen=True)
class Board:
    """A flat board: inner corners along its two sides, and the side of a square in mm.

    dictionary: the markers' OpenCV name (`DICT_4X4_50`) for a ChArUco board, "" for a chessboard; marker_mm their side.
    """

    corners: tuple[int, int]
    square_mm: float
    dictionary: str = ""
    marker_mm: float = 0.0

    @property
    def points_mm(self) -> FloatArray:
        """(columns * rows, 2) corners in the board's frame, row by row."""
        columns, rows = self.corners
        grid = np.stack(np.meshgrid(np.arange(columns), np.arange(rows)), axis=-1).reshape(-1, 2)
        return np.asarray(grid * self.square_mm, dtype=np.float64)


@dataclass(frozen=True)
class View:
    """A board seen in one image: corners at pixels (k, 2), on the board at points_mm (k, 2)."""

    file: str
    image_size_px: tuple[int, int]
    pixels: FloatArray
    points_mm: FloatArray


def view_of(path: Path, board: Board) -> View | None:
    """The board in an image file; None where it is not found. Raises InputFault for a file that is no image."""
    image = read_image(path)
    if image.ndim == 3:
        image = cv2.cvtColor(image, cv2.COLOR_BGR2GRAY).astype(np.uint8)
    found = _charuco(image, board) if board.dictionary else _chessboard(image, board)
    if found is None:
        return None
    pixels, points = found
    return View(str(path), (image.shape[1], image.shape[0]), pixels, points)


def _chessboard(image: NDArray[np.uint8], board: Board) -> tuple[FloatArray, FloatArray] | None:
    """All corners, by fitted saddle points (Duda and Frese 2018), by the older search where that fails."""
    thorough = cv2.CALIB_CB_ACCURACY | cv2.CALIB_CB_EXHAUSTIVE
    found, corners = cv2.findChessboardCornersSB(image, board.corners, flags=thorough)
    if not found:
        found, corners = cv2.findChessboardCorners(image, board.corners)
        if not found:
            return None
        apart = np.linalg.norm(np.diff(corners.reshape(-1, 2), axis=0), axis=1).min()
        half = int(np.clip(apart / 3, 2, 11))  # a window that holds one corner only
        until = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_COUNT, 100, 1e-4)
        corners = cv2.cornerSubPix(image, corners.reshape(-1, 1, 2), (half, half), (-1, -1), until)
    return corners.reshape(-1, 2).astype(np.float64), board.points_mm


def _charuco(image: NDArray[np.uint8], board: Board) -> tuple[FloatArray, FloatArray] | None:
    columns, rows = board.corners
    dictionary = cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, board.dictionary))
    for older in (False, True):  # boards of an even number of rows were drawn the other way round before
        pattern = cv2.aruco.CharucoBoard((columns + 1, rows + 1), board.square_mm, board.marker_mm, dictionary)
        pattern.setLegacyPattern(older)
        corners, numbers = cv2.aruco.CharucoDetector(pattern).detectBoard(image)[:2]
        if numbers is not None and len(numbers) >= _FEWEST_CORNERS:
            at = np.asarray(numbers).ravel()
            return np.asarray(corners, dtype=np.float64).reshape(-1, 2), board.points_mm[at]
    return None


def checked_board(corners: str, square_mm: float, dictionary: str, marker_mm: float) -> Board:
    """A board from what was written on the command line. Raises InputFault naming the option."""
    parts = corners.lower().split("x")
    if len(parts) != 2 or not all(part.isdecimal() for part in parts) or not all(3 <= int(p) <= 200 for p in parts):
        raise InputFault("--board", "", f"{printable(corners)!r} is not COLUMNSxROWS", "write inner corners, like 9x6")
    if not 0 < square_mm < 1e6:
        raise InputFault("--square-mm", "", f"{square_mm:g} is no side of a square", "write millimetres")
    if dictionary and not (dictionary.startswith("DICT_") and hasattr(cv2.aruco, dictionary)):
        raise InputFault("--charuco", "", f"no marker dictionary {printable(dictionary)!r}",
                         "write one like DICT_4X4_50")
    if dictionary and not 0 < marker_mm < square_mm:
        raise InputFault("--marker-mm", "", f"{marker_mm:g} is not between 0 and the square", "write the marker's side")
    return Board((int(parts[0]), int(parts[1])), square_mm, dictionary, marker_mm)
