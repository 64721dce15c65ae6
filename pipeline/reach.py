"""Where an arm can grip: over the belt window and at each slot, at which yaws, which elbow, with how much to spare.

A posture counts where every joint keeps its margin from its limits, from the way across down to the tool's height,
where the elbow is not nearly stretched or folded, and where nothing of the arm stands in a keep-out. The belt speed
that can be followed is the one at which the first joint reaches its speed limit, from the inverse Jacobian
(Spong, Hutchinson, Vidyasagar, Robot Modeling and Control, 2006, section 4.11).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pipeline.arm import Arm
from pipeline.cell import Cell
from pipeline.places import Place
from pipeline.room import Keepouts
from pipeline.shapes import Shapes

Floats = NDArray[np.float64]

TURNING = [0, 1, 3]
J4_TURNS = np.arange(-2, 3)
BLOCK = 20_000  # poses looked at together
MOST_STATIONS = 200  # along and across a window, however large it is


@dataclass(frozen=True, eq=False)
class Postures:
    """How an arm stands at n tips with either elbow (right, left); of J4's turns, the one that leaves most."""

    fits: NDArray[np.bool_]  # (n, 2)
    to_limit: Floats  # (n, 2) rad beyond the margin to the nearest limit of a turning joint; negative: over it
    to_limit_mm: Floats  # (n, 2) the same for J3
    nearest: NDArray[np.int64]  # (n, 2) which turning joint that is: 0, 1 or 3
    follow_mm_s: Floats  # (n, 2) fastest belt that can be followed there


@dataclass(frozen=True, eq=False)
class Spots:
    """n points seen over a number of tool yaws each: one row of reach.csv a point."""

    where: tuple[str, ...]  # (n,) "window" of the belt, "surface" of a tray, or the place
    slot: NDArray[np.int64]  # (n,) number of the slot, -1 in the window
    tip_mm: Floats  # (n, 3)
    angles: NDArray[np.int64]  # (n,) how many yaws were looked at
    share: Floats  # (n, 3) of them that can be gripped: with the right elbow, with the left, with either
    to_limit: Floats  # (n,) rad, of the better elbow, at the median of the yaws that can be gripped; NaN: at none
    to_limit_mm: Floats  # (n,)
    nearest: NDArray[np.int64]  # (n,) the turning joint nearest to its limit; -1: none
    follow_mm_s: Floats  # (n,) NaN at places and trays, which stand still

    def __len__(self) -> int:
        return len(self.where)


class Reacher:
    """Asks of one arm in one cell where it can grip."""

    def __init__(self, cell: Cell) -> None:
        self.cell, self.arm = cell, Arm(cell.arm, cell.tool)
        margin = np.radians(np.full(4, cell.motion.limit_margin_deg))
        margin[2] = cell.motion.limit_margin_mm
        self.lower, self.upper = self.arm.limits.lower + margin, self.arm.limits.upper - margin
        self.keepouts = Keepouts(cell.keepouts, self.arm, Shapes.of(cell.tool.footprint_mm))
        heading = np.radians(cell.belt.heading_deg) if cell.belt else 0.0
        self.along = np.array([np.cos(heading), np.sin(heading)])
        self.across = np.array([-np.sin(heading), np.cos(heading)])

    def postures(self, tips: ArrayLike) -> Postures:
        """Both elbows' postures at tips (n, 4), x, y, z mm, yaw rad."""
        poses = np.asarray(tips, np.float64)
        joints = self.arm.with_j4_turn(self.arm.inverse(poses)[:, :, None], J4_TURNS)  # (n, 2, turns, 4)
        spare = np.minimum(joints - self.lower, self.upper - joints)
        bend = np.abs(joints[..., 1])
        singular = np.minimum(bend, np.pi - bend) - np.radians(self.cell.motion.singularity_deg)
        rise = np.maximum(self.cell.motion.travel_mm - poses[:, 2], 0.0)[:, None, None]
        lifted = joints[..., 2] + self.arm.sense[2] * rise
        spare[..., 2] = np.minimum(spare[..., 2], np.minimum(lifted - self.lower[2], self.upper[2] - lifted))
        turning = spare[..., TURNING].min(axis=-1)
        best = np.argmax(np.nan_to_num(np.where(spare[..., 2] >= 0, turning, turning - 100.0), nan=-np.inf), axis=2)
        chosen = np.take_along_axis(joints, best[..., None, None], axis=2)[:, :, 0]
        spare = np.take_along_axis(spare, best[..., None, None], axis=2)[:, :, 0]
        nearest = np.array(TURNING)[np.argmin(spare[..., TURNING], axis=-1)]
        least = spare[..., TURNING].min(axis=-1)
        fits = (least >= 0) & (spare[..., 2] >= 0) & (singular[:, :, 0] >= 0)
        fits[fits] = self.keepouts.clearance(chosen[fits]) >= 0
        return Postures(fits, least, spare[..., 2], nearest, self._follow(chosen))

    def _follow(self, joints: Floats) -> Floats:
        """The fastest belt (n, 2) in mm/s that joints (n, 2, 4) can follow, the tool's yaw and height kept."""
        rates = np.abs(self.arm.rates(joints, np.array([*self.along, 0.0, 0.0])))
        with np.errstate(divide="ignore"):
            return np.asarray((self.arm.limits.speed / rates).min(axis=-1))

    def spots(self, where: str, tips_mm: ArrayLike, yaws: ArrayLike, slots: ArrayLike | None = None) -> Spots:
        """What can be gripped at points (n, 3), each at the same yaws (m,), rad; slots: their numbers in a place."""
        points, angles = np.asarray(tips_mm, np.float64).reshape(-1, 3), np.asarray(yaws, np.float64)
        n, m = len(points), len(angles)
        rows = []
        for block in np.array_split(np.arange(n), max(1, n * m // BLOCK)):
            tips = np.concatenate([np.repeat(points[block], m, axis=0), np.tile(angles, len(block))[:, None]], axis=1)
            rows.append(_summed(self.postures(tips), len(block), m))
        share, spare, spare_mm, nearest, follow = (np.concatenate(column) for column in zip(*rows, strict=True))
        numbers = np.full(n, -1) if slots is None else np.asarray(slots, np.int64)
        if self.cell.belt is None or slots is not None:
            follow = np.full(n, np.nan)
        return Spots((where,) * n, numbers, points, np.full(n, m), share, spare, spare_mm, nearest, follow)

    def span_mm(self) -> tuple[float, float, float]:
        """Where the arm stands along the heading and to the left of it, and how far its tool reaches."""
        reach = self.arm.link1_mm + self.arm.link2_mm + float(np.hypot(*self.arm.offset_mm))
        base = self.arm.base_mm[:2]
        return float(base @ self.along), float(base @ self.across), reach

    def grid_mm(self, along: ArrayLike, across: ArrayLike) -> Floats:
        """Points (n, 3) at the lowest grasp height: distances along the heading by distances to the left of it."""
        pairs = np.stack(np.meshgrid(along, across, indexing="ij"), axis=-1).reshape(-1, 2)
        return np.column_stack([pairs @ np.array([self.along, self.across]), np.full(len(pairs), self.grasp_mm)])

    def window(self, step_mm: float = 20.0, angles: int = 72) -> Spots:
        """The belt window, or all around the arm where there is none, as far as the arm reaches to either side."""
        along, across, reach = self.span_mm()
        low, high = (self.cell.belt and self.cell.belt.window_mm) or (along - reach, along + reach)
        grid = self.grid_mm(stations(low, high, step_mm), stations(across - reach, across + reach, step_mm))
        return self.spots("window" if self.cell.belt else "surface", grid, yaws_of(angles))

    @property
    def grasp_mm(self) -> float:
        """Height of the tool tip at the lowest grasp; of the surface where no part is described."""
        return self.cell.surface_mm + min((part.grasp_mm for part in self.cell.parts.values()), default=0.0)

    def slots(self, angles: int = 72) -> list[Spots]:
        """Each place's slots, at the yaws at which the parts that go there may be set down."""
        found = []
        for cell in self.cell.places:
            place = Place.of(cell)
            folds = [part.turns for part in self.cell.parts.values() if cell.name in part.places] or [1]
            free = place.any_yaw or 0 in folds
            turns = yaws_of(angles) if free else np.unique(np.concatenate([yaws_of(fold).round(9) for fold in folds]))
            yaws = place.yaw + turns
            found.append(self.spots(cell.name, place.slots_mm, yaws, np.arange(len(place.slots_mm))))
        return found


def yaws_of(number: int) -> Floats:
    """Yaws (number,) that share a turn evenly, from 0, rad."""
    return 2 * np.pi * np.arange(number) / number


def stations(low: float, high: float, step_mm: float) -> Floats:
    """Distances from low to high, about a step apart."""
    return np.linspace(low, high, min(max(2, 1 + round((high - low) / step_mm)), MOST_STATIONS))


def _summed(postures: Postures, n: int, m: int) -> tuple[Floats, Floats, Floats, NDArray[np.int64], Floats]:
    """Columns of `Spots` from postures at m yaws of each of n points, point by point."""
    fits = postures.fits.reshape(n, m, 2)
    share = np.column_stack([fits.mean(axis=1), fits.any(axis=2).mean(axis=1)])
    spare = np.where(fits, postures.to_limit.reshape(n, m, 2), -np.inf)
    better = np.argmax(spare, axis=2)[..., None]  # elbow, at each yaw
    either = fits.any(axis=2)

    def middle(values: Floats) -> Floats:
        """Median (n,) over the yaws that can be gripped, of the better elbow."""
        taken = np.take_along_axis(values.reshape(n, m, 2), better, axis=2)[..., 0]
        ordered = np.sort(np.where(either, taken, np.inf), axis=1)
        count = either.sum(axis=1)
        pick = np.take_along_axis(ordered, np.maximum(count - 1, 0)[:, None] // 2, axis=1)[:, 0]
        return np.where(count > 0, pick, np.nan)

    nearest = np.take_along_axis(postures.nearest.reshape(n, m, 2), better, axis=2)[..., 0]
    worst = np.argmin(np.where(either, spare.max(axis=2), np.inf), axis=1)[:, None]
    joint = np.where(np.any(either, axis=1), np.take_along_axis(nearest, worst, axis=1)[:, 0], -1)
    return share, middle(postures.to_limit), middle(postures.to_limit_mm), joint, middle(postures.follow_mm_s)
