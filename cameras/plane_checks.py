"""What to be warned of in a plane fit."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cameras.faults import InputFault
from cameras.field import Field, share_touched
from cameras.plane import PlaneFit, fit_touches
from cameras.plane_start import thinness

FloatArray = NDArray[np.float64]
ENOUGH_TOUCHES = 8
WIDE_ENOUGH = 0.15
ENOUGH_OF_FIELD = 0.4
_SURE = 4.0  # standard errors


@dataclass(frozen=True)
class CarryDrift:
    """How the residuals grow with how far a mark was carried to be touched, in mm per mm, with standard errors."""

    along: float
    across: float
    along_error: float
    across_error: float

    @property
    def certain(self) -> bool:
        """Whether either lies beyond what chance would do."""
        return abs(self.along) > _SURE * self.along_error or abs(self.across) > _SURE * self.across_error


def carry_drift(fit: PlaneFit, travel_mm: FloatArray, heading_rad: float) -> CarryDrift | None:
    """The drift that explains the residuals best; None where the marks were not carried far enough to tell.

    Both terms are fitted beside the map itself: regressors and residuals are taken across what the map can follow
    (Frisch and Waugh 1933).
    """
    along = np.array([np.cos(heading_rad), np.sin(heading_rad)])
    across = np.array([-along[1], along[0]])
    moved = travel_mm[fit.kept, None, None] * np.stack([along, across], axis=-1)
    slope = fit.slope[fit.kept].reshape(-1, fit.slope.shape[-1])
    terms = moved.reshape(-1, 2)
    terms = terms - slope @ np.linalg.lstsq(slope, terms, rcond=None)[0]
    freedom = len(slope) - np.linalg.matrix_rank(slope) - 2
    if freedom < 1 or np.linalg.norm(terms, axis=0).min() < 1.0:
        return None
    off = -fit.residuals_mm[fit.kept].ravel()
    best = np.linalg.lstsq(terms, off, rcond=None)[0]
    rest = off - slope @ np.linalg.lstsq(slope, off, rcond=None)[0] - terms @ best
    errors = np.sqrt(np.diag(np.linalg.inv(terms.T @ terms)) * (rest @ rest) / freedom)
    return CarryDrift(float(best[0]), float(best[1]), float(errors[0]), float(errors[1]))


def plane_warnings(fit: PlaneFit, field: Field) -> list[str]:
    """One sentence for each thing about a fit that an integrator should mend."""
    kept = fit.points[fit.kept]
    found = []
    if len(kept) < ENOUGH_TOUCHES:
        found.append(f"only {len(kept)} touches carry the map: touch {ENOUGH_TOUCHES} or more, better 20")
    if fit.map.freedom == 0:
        found.append("no touch is to spare: nothing tells how good the map is (a pixel is assumed)")
    if thinness(kept[:, :2]) < WIDE_ENOUGH:
        found.append("the touches lie nearly on a line: across it the map is a guess")
    share = share_touched(fit.map, field)
    if share < ENOUGH_OF_FIELD:
        found.append(f"the touches enclose {share:.0%} of the field: outside them the map is extrapolated")
    if np.isnan(field.points_mm).any():
        found.append("parts of the image see no point of the surface")
    if fit.map.basis == "pose" and _better_without_lens(fit):
        found.append("the touches fit better without the lens file: is it of this camera, at this size and focus?")
    return found


def _better_without_lens(fit: PlaneFit) -> bool:
    """Whether the same touches are foretold better without the lens file, by more than chance would."""
    try:
        bare = fit_touches(fit.pixels, fit.points, None, fit.map.image_size_px).map.leave_one_out_rms_mm
    except InputFault:
        return False
    given = fit.map.leave_one_out_rms_mm
    return given is not None and bare is not None and bare < 0.7 * given
