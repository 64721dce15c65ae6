"""What the sightings of one part disagree by, systematically: a wrong scale, heading or time stamp."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

CLEAR = 4.0  # a drift is told of from this many standard errors,
WORTH_MM = 0.1  # and from this many mm in 100 mm of travel
WORTH_S = 0.001  # or this delay
OUTLIERS = 5.0  # sightings further off than this many median deviations are left out of the fit
FEWEST_PARTS = 4


@dataclass(frozen=True)
class Drift:
    """Drift between sightings of the same parts, with standard errors that allow for the parts' own shapes of it.

    along_mm, across_mm: in 100 mm of travel as the counts tell it; across is to the left of the heading.
    delay_s: by which images are taken after their counts are read; NaN where the belt's speed did not vary enough.
    parts: how many were seen in more than one place.  mm_per_count: as given.
    by_kind: name, along_mm and its error of each kind of which enough parts were.
    """

    along_mm: float
    along_error_mm: float
    across_mm: float
    across_error_mm: float
    delay_s: float
    delay_error_s: float
    parts: int
    mm_per_count: float
    by_kind: tuple[tuple[str, float, float], ...] = ()

    @property
    def findings(self) -> tuple[str, ...]:
        """One sentence for each drift that is clear and worth mending; none where all is well."""
        told = []
        alone = self._kinds_alone()
        if alone:
            told.append("sightings of " + ", ".join(f"{name} drift {along:+.2f} mm" for name, along, _ in alone)
                        + " per 100 mm along the belt, others do not: recheck height_mm, as seen by the camera")
        elif _clear(self.along_mm, self.along_error_mm, WORTH_MM):
            better = self.mm_per_count * (1 + self.along_mm / 100)
            told.append(f"sightings drift {self.along_mm:+.2f} mm per 100 mm along the belt: recheck mm_per_count "
                        f"({better:.6g} would remove it), the scale of the plane map, or the parts' heights")
        if _clear(self.across_mm, self.across_error_mm, WORTH_MM):
            turn = np.degrees(np.arctan2(self.across_mm, 100 + self.along_mm))
            told.append(f"sightings drift {self.across_mm:+.2f} mm per 100 mm across the belt: recheck heading_deg "
                        f"({turn:+.3f} would remove it), or how the plane map lies to the belt")
        if _clear(self.delay_s, self.delay_error_s, WORTH_S):
            late, ms = "after" if self.delay_s > 0 else "before", f"{1000 * abs(self.delay_s):.1f} ms"
            told.append(f"sightings shift with the belt's speed, as if images were taken {ms} {late} their counts: "
                        "recheck the time stamps, and when the counts are read")
        return tuple(told)

    def _kinds_alone(self) -> tuple[tuple[str, float, float], ...]:
        """The kinds that drift clearly, where at least one other kind clearly drifts less: parallax, not the belt."""
        drifting = [one for one in self.by_kind if _clear(one[1], one[2], WORTH_MM)]
        still = [one for one in self.by_kind if abs(one[1]) < WORTH_MM]
        return tuple(one for one in drifting
                     if any(_clear(one[1] - other[1], float(np.hypot(one[2], other[2])), WORTH_MM) for other in still))


def _clear(value: float, error: float, worth: float) -> bool:
    return bool(abs(value) >= worth and abs(value) > CLEAR * error)


def fit_drift(group: IntArray, thing: IntArray, at_mm: FloatArray, sigma_mm: FloatArray, travel_mm: FloatArray,
              speed_mm_s: FloatArray, heading: FloatArray, mm_per_count: float) -> Drift | None:
    """Drift from sightings of things seen in several places; None where fewer than FEWEST_PARTS things were.

    group (n,): the thing and camera of each sighting, over which each has a place of its own; thing (n,); at_mm (n, 2)
    at counts 0; travel_mm, speed_mm_s (n,) of the belt; heading (2,). Weighted least squares of the places, less their
    group's mean, on travel and speed, likewise less their mean; outliers left out; errors by thing (Liang, Zeger,
    Biometrika 73, 1986: sightings of one thing may err together).
    """
    axes = np.stack([heading, [-heading[1], heading[0]]], axis=1)
    keep = np.ones(len(thing), dtype=bool)
    for _ in range(3):
        weight = np.where(keep, 1 / sigma_mm**2, 0.0)
        places = less_mean(at_mm @ axes, group, weight)
        cause = less_mean(np.stack([travel_mm / 100, speed_mm_s], axis=1), group, weight)
        parts = _moved(cause[:, 0], thing, keep)
        if parts < FEWEST_PARTS:
            return None
        along, across = _fit(cause, places[:, 0], weight), _fit(cause[:, :1], places[:, 1], weight)
        off = np.abs(np.stack([places[:, 0] - cause @ along, places[:, 1] - cause[:, 0] * across[0]], axis=1))
        telling = keep & (np.bincount(group, keep)[group] > 1)  # a group of one is never off its own mean
        keep = (off <= OUTLIERS * 1.4826 * np.median(off[telling], axis=0) + 1e-9).all(axis=1)
    along_errors = _errors(cause, places[:, 0] - cause @ along, weight, thing)
    across_error = _errors(cause[:, :1], places[:, 1] - cause[:, 0] * across[0], weight, thing)[0]
    whole_counts = abs(mm_per_count) / max(float(np.ptp(speed_mm_s)), 1e-9)  # all sightings at a stop share one count
    delay = along[1] if np.isfinite(along_errors[1]) else np.nan
    return Drift(float(along[0]), float(along_errors[0]), float(across[0]), float(across_error), float(delay),
                 float(np.hypot(along_errors[1], whole_counts)), parts, mm_per_count)


def less_mean(values: FloatArray, group: IntArray, weight: FloatArray) -> FloatArray:
    """Values (n, k) less the weighted mean of their group."""
    total = np.maximum(np.bincount(group, weight), 1e-300)
    means = np.stack([np.bincount(group, weight * column) / total for column in values.T], axis=1)
    return values - means[group]


def _moved(travel: FloatArray, thing: IntArray, keep: NDArray[np.bool_]) -> int:
    """How many things were seen in places more than 10 mm of travel apart (travel in 100 mm, less its mean)."""
    return len(np.unique(thing[keep & (np.abs(travel) > 0.05)]))


def _fit(cause: FloatArray, places: FloatArray, weight: FloatArray) -> FloatArray:
    """Slopes by weighted least squares; 0 for a cause that does not vary by itself."""
    found = np.zeros(cause.shape[1])
    free = _free(cause, weight)
    root = np.sqrt(weight)
    found[free] = np.linalg.lstsq(root[:, None] * cause[:, free], root * places, rcond=None)[0]
    return found


def _free(cause: FloatArray, weight: FloatArray) -> NDArray[np.bool_]:
    """Which causes vary by themselves: travel always, speed where it is no mere shadow of travel."""
    free = np.ones(cause.shape[1], dtype=bool)
    if cause.shape[1] > 1:
        travel, speed = cause.T
        alone = speed - travel * ((weight * travel * speed).sum() / max((weight * travel**2).sum(), 1e-300))
        free[1] = (weight * alone**2).sum() > weight.sum() * 1.0  # mm/s squared: over encoder noise
    return free


def _errors(cause: FloatArray, left: FloatArray, weight: FloatArray, thing: IntArray) -> FloatArray:
    """Standard errors of the slopes, by thing; NaN for a cause that does not vary by itself."""
    free = _free(cause, weight)
    x = cause[:, free]
    inverse = np.linalg.pinv(x.T @ (weight[:, None] * x))
    scores = np.stack([np.bincount(thing, weight * left * column) for column in x.T], axis=1)
    many = max(int((np.abs(scores).sum(axis=1) > 0).sum()), 2)
    errors = np.full(cause.shape[1], np.nan)
    errors[free] = np.sqrt(np.diag(inverse @ (scores.T @ scores) @ inverse) * many / (many - 1))
    return errors
