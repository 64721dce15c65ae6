"""How high the edges of each kind really are: a wrong height makes the kind's sightings drift along the belt."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.follow.drift import less_mean

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

BELT_SHARE = 1e-3  # standard deviation of what belt and map may add to the travel: less than is worth mending
OUTLIERS = 4.0  # sightings further off than this many median deviations are left out
LEAST_NOISE_MM = 0.03


@dataclass(frozen=True)
class Levels:
    """How much higher the edges of each look (kind and side) are than assumed, in their standard deviations.

    raised (looks,), sigma (looks,): 0 and 1 where nothing is told.
    """

    raised: FloatArray
    sigma: FloatArray


def level(look: IntArray, looks: int, group: IntArray, at_mm: FloatArray, sigma_mm: FloatArray, lean_mm: FloatArray,
          travel_mm: FloatArray, heading: FloatArray) -> Levels:  # fmt: skip
    """Heights from sightings of the same things in several places.

    look (n,): below `looks`; group (n,): the thing and camera of each sighting; at_mm (n, 2) at counts 0; lean_mm (n,
    2) as in `Sightings`; travel_mm (n,); heading (2,). Least squares of the places, less their group's mean, on leans
    and travel, held back by what was assumed of the heights and is known of the belt (Gelman et al., Bayesian Data
    Analysis, 3rd ed. 2013, section 14.8). A belt that drifts by more than is worth mending hides heights: then none is
    told.
    """
    none = Levels(np.zeros(looks), np.ones(looks))
    if not len(look) or not np.any(lean_mm):
        return none
    noise = np.sqrt(np.maximum(sigma_mm**2 - 0.5 * np.sum(lean_mm**2, axis=1), LEAST_NOISE_MM**2))
    causes = np.zeros((2, len(look), looks + 2))
    for k in range(2):
        causes[k, np.arange(len(look)), look] = lean_mm[:, k]
        causes[k, :, looks] = travel_mm * heading[k]
        causes[k, :, looks + 1] = travel_mm * (-heading[1], heading[0])[k]
    held = np.diag([1.0] * looks + [BELT_SHARE**-2] * 2)
    keep = np.ones(len(look), dtype=bool)
    for _ in range(3):
        weight = np.where(keep, noise**-2, 0.0)
        x = np.concatenate([less_mean(one, group, weight) for one in causes])
        y = less_mean(at_mm, group, weight).T.ravel()
        twice = np.tile(weight, 2)
        precision = x.T @ (twice[:, None] * x) + held
        found = np.linalg.solve(precision, x.T @ (twice * y))
        off = np.linalg.norm((y - x @ found).reshape(2, -1), axis=0) / noise
        several = keep & (np.bincount(group, keep)[group] > 1)
        if not several.any():
            return none
        keep = off <= OUTLIERS * 1.4826 * np.median(off[several]) + 1e-9
    if np.hypot(*found[looks:]) > BELT_SHARE:
        return none
    return Levels(found[:looks], np.sqrt(np.diag(np.linalg.inv(precision))[:looks]))
