"""Curves: joint or height over time as piecewise cubics, taken from ruckig's profiles, with exact extremes."""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import ruckig
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Curve:
    """One channel over time: on [start_s[k], start_s[k+1]) a cubic in the time since start_s[k].

    start_s (m,) rising; coefficients (m, 4): position, speed, acceleration / 2, jerk / 6. Before the first start the
    first position is held, after end_s the last.
    """

    start_s: FloatArray
    coefficients: FloatArray
    end_s: float

    def at(self, t: FloatArray) -> FloatArray:
        """Position at times t (n,)."""
        k = np.maximum(np.searchsorted(self.start_s, t, side="right") - 1, 0)
        x = np.clip(t, self.start_s[0], self.end_s) - self.start_s[k]
        c = self.coefficients[k]
        return np.asarray(c[:, 0] + x * (c[:, 1] + x * (c[:, 2] + x * c[:, 3])))

    def later(self, by_s: float) -> "Curve":
        """The same curve, by_s later."""
        return Curve(self.start_s + by_s, self.coefficients, self.end_s + by_s)

    def state(self, t: float) -> tuple[float, float, float]:
        """Position, speed and acceleration at one time."""
        k = max(int(np.searchsorted(self.start_s, t, side="right")) - 1, 0)
        x = min(max(t, float(self.start_s[0])), self.end_s) - float(self.start_s[k])
        p, v, a, j = self.coefficients[k].tolist()
        return p + x * (v + x * (a + x * j)), v + x * (2 * a + 3 * x * j), 2 * a + 6 * x * j

    def backwards(self) -> "Curve":
        """The same curve read backwards, over the same time."""
        x, (p, v, a, j) = self.span, self.coefficients.T
        ends = np.column_stack([p + x * (v + x * (a + x * j)), -(v + x * (2 * a + 3 * x * j)), a + 3 * x * j, -j])
        first = float(self.start_s[0])
        return Curve((first + self.end_s - self.start_s - x)[::-1], ends[::-1], self.end_s)

    @property
    def span(self) -> FloatArray:
        """Durations of the pieces (m,)."""
        return np.diff(self.start_s, append=self.end_s)

    def extremes(self) -> tuple[float, float, float, float, float]:
        """Least and greatest position, greatest |speed|, |acceleration|, |jerk|, exact over all pieces.

        A cubic's extremes lie at its ends and at the real roots of its derivatives inside the piece.
        """
        p, v, a, j = self.coefficients.T
        span = self.span
        inside = [np.zeros_like(span), span]
        with np.errstate(divide="ignore", invalid="ignore"):
            root = np.sqrt(4 * a * a - 12 * j * v)
            turns = ((-2 * a + root) / (6 * j), (-2 * a - root) / (6 * j), -v / (2 * a), -a / (3 * j))
        x = np.stack([*inside, *(np.where(np.isfinite(t), np.clip(t, 0.0, span), 0.0) for t in turns)])
        position = p + x * (v + x * (a + x * j))
        speed = v + x * (2 * a + 3 * x * j)
        accel = 2 * a + 6 * x * j
        return (float(position.min()), float(position.max()), float(np.abs(speed).max()), float(np.abs(accel).max()),
                float(np.abs(6 * j).max()))

    def travel(self) -> float:
        """Way covered, back and forth counted."""
        p, v, a, j = self.coefficients.T
        span = self.span
        with np.errstate(divide="ignore", invalid="ignore"):
            root = np.sqrt(4 * a * a - 12 * j * v)
            turns = [(-2 * a + root) / (6 * j), (-2 * a - root) / (6 * j), -v / (2 * a)]
        x = np.sort(np.stack([np.zeros_like(span), *(np.where(np.isfinite(t), np.clip(t, 0, span), 0) for t in turns),
                              span]), axis=0)
        return float(np.abs(np.diff(p + x * (v + x * (a + x * j)), axis=0)).sum())

    @classmethod
    def held(cls, position: float, start_s: float, end_s: float) -> "Curve":
        """Standing still."""
        return cls(np.array([start_s]), np.array([[position, 0.0, 0.0, 0.0]]), end_s)

    @classmethod
    def joined(cls, curves: Sequence["Curve"]) -> "Curve":
        """Curves that follow each other; each is cut where the next one starts."""
        kept = [(curve.start_s[:m], curve.coefficients[:m]) for curve, m in zip(curves, _cuts(curves), strict=True)]
        return cls(np.concatenate([k[0] for k in kept]), np.concatenate([k[1] for k in kept]), curves[-1].end_s)


def _cuts(curves: Sequence[Curve]) -> list[int]:
    """How many pieces of each curve start before the next curve does."""
    cuts = [int(np.searchsorted(a.start_s, b.start_s[0], side="left")) for a, b in pairwise(curves)]
    return [*cuts, len(curves[-1].start_s)]


def curves_of(trajectory: ruckig.Trajectory, start_s: float, scale: Sequence[float]) -> tuple[Curve, ...]:
    """One Curve a degree of freedom, from ruckig's own pieces, each multiplied by its scale."""
    end_s = start_s + trajectory.duration
    made = []
    for profile, factor in zip(trajectory.profiles[0], scale, strict=True):
        spans, rows = [], []
        brake = profile.brake
        if brake.duration > 0:
            spans += list(brake.t)
            rows += list(zip(brake.p, brake.v, brake.a, brake.j, strict=True))
        spans += list(profile.t)
        rows += list(zip(profile.p[:7], profile.v[:7], profile.a[:7], profile.j, strict=True))
        if sum(spans) < trajectory.duration - 1e-12:  # this joint is there before the others
            rows.append((profile.pf, profile.vf, profile.af, 0.0))
            spans.append(trajectory.duration - sum(spans))
        t = np.array(spans)
        kept = t > 0
        kept[0] |= not kept.any()
        starts = start_s + np.concatenate([[0.0], np.cumsum(t)[:-1]])
        table = np.array(rows)[kept] * (factor * np.array([1.0, 1.0, 0.5, 1.0 / 6.0]))
        made.append(Curve(starts[kept], table, end_s))
    return tuple(made)
