"""Fit a lens to views of a flat board (Zhang 2000, with the distortion of Brown 1966)."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import log
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.boards import View
from cameras.faults import InputFault
from cameras.lens import Lens

FloatArray = NDArray[np.float64]
FEWEST_VIEWS = 3


@dataclass(frozen=True)
class LensFit:
    """A lens and the n views it was fitted to.

    rms_px: root mean square distance between seen and predicted corners; view_rms_px (n,): for each view.
    fitted: how many numbers of the lens were.
    """

    lens: Lens
    rms_px: float
    view_rms_px: FloatArray
    views: tuple[View, ...]
    fitted: int

    @property
    def spoilers(self) -> list[int]:
        """Views with more than twice the RMS of the median view."""
        return [int(k) for k in np.flatnonzero(self.view_rms_px > 2 * np.median(self.view_rms_px))]

    def document(self) -> dict[str, Any]:
        """The lens as a JSON object, with what it was fitted to."""
        seen = [{"file": Path(view.file).name, "corners": len(view.pixels), "rms_px": float(rms)}
                for view, rms in zip(self.views, self.view_rms_px, strict=True)]
        return {**self.lens.document(), "rms_px": self.rms_px, "views": seen}


def fit_lens(views: Sequence[View]) -> LensFit:
    """Lens of least squares in pixels; the radial term of sixth order is fitted only where it earns its place.

    Raises InputFault for fewer than three views, views of several sizes, and views that determine no lens.
    """
    if len(views) < FEWEST_VIEWS:
        raise InputFault("images", "", f"the board was found in {len(views)}, {FEWEST_VIEWS} are the least",
                         "take 8 to 20 views, tilted and spread over the image; check --board")
    for view in views:
        if view.image_size_px != views[0].image_size_px:
            raise InputFault(view.file, "", f"is {view.image_size_px}, the first image is {views[0].image_size_px}",
                             "give images of one camera at one size")
    return min((_fitted(views, fixed) for fixed in ((8,), ())), key=_information)


def _information(fit: LensFit) -> float:
    """Bayes information criterion (Schwarz 1978): less is better."""
    residuals = 2 * sum(len(view.pixels) for view in fit.views)
    return residuals * 2 * log(max(fit.rms_px, 1e-9)) + fit.fitted * log(residuals)


def _fitted(views: Sequence[View], fixed: tuple[int, ...]) -> LensFit:
    """The fit with the lens's parameters of these indices held at 0."""
    flat = [np.column_stack([view.points_mm, np.zeros(len(view.points_mm))]).astype(np.float32) for view in views]
    seen = [view.pixels.astype(np.float32) for view in views]
    undetermined = InputFault("images", "", "the views do not determine a lens",
                              "tilt the board, each view another way")
    try:
        rms, matrix, distortion, turns, shifts = cv2.calibrateCamera(
            flat, seen, views[0].image_size_px, None, None, flags=cv2.CALIB_FIX_K3 if 8 in fixed else 0)
    except cv2.error:
        raise undetermined from None
    parameters = np.array([matrix[0, 0], matrix[1, 1], matrix[0, 2], matrix[1, 2], *distortion.ravel()[:5]])
    if not np.isfinite(parameters).all() or (parameters[:2] <= 0).any():
        raise undetermined
    slopes, residuals = [], []
    for view, points, turn, shift in zip(views, flat, turns, shifts, strict=True):
        at, slope = cv2.projectPoints(points.astype(np.float64), turn, shift, matrix, distortion)
        residuals.append(at.reshape(-1, 2) - view.pixels)
        slopes.append(np.asarray(slope, dtype=np.float64))
    free = [k for k in range(9) if k not in fixed]
    lens = Lens(parameters, views[0].image_size_px, _covariance(slopes, np.concatenate(residuals), free))
    each = np.array([np.sqrt((one**2).sum(axis=1).mean()) for one in residuals])
    return LensFit(lens, float(rms), each, tuple(views), len(free))


def _covariance(slopes: list[FloatArray], residuals: FloatArray, free: list[int]) -> FloatArray:
    """(9, 9) of the lens: the poses of the views eliminated from the normal equations (Schur complement)."""
    normal = np.zeros((len(free), len(free)))
    for slope in slopes:
        pose, lens = slope[:, :6], slope[:, 6:15][:, free]
        normal += lens.T @ (lens - pose @ np.linalg.lstsq(pose, lens, rcond=None)[0])
    freedom = max(residuals.size - 6 * len(slopes) - len(free), 1)
    size = np.sqrt(np.maximum(np.diag(normal), 1e-30))
    inverse = np.linalg.pinv(normal / np.outer(size, size), hermitian=True) / np.outer(size, size)
    covariance = np.zeros((9, 9))
    covariance[np.ix_(free, free)] = inverse * float((residuals**2).sum()) / freedom
    return covariance
