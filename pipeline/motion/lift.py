"""The tool tip's height between two contacts: up out of one column, over the way across, down into the next.

The way across may begin when the tip passes the gate on its way up, and must have ended when it passes the gate on its
way down; in between the tip need not stop. One number shapes such a move: the time at which the rise is broken off and
the tip is sent down (both parts time-optimal and jerk-limited). The later that is, the longer it is above the gates.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import ruckig
from numpy.typing import NDArray

from pipeline.motion.curve import Curve, curves_of

FloatArray = NDArray[np.float64]
SAMPLES = 40
EXACT_S = 1e-7
MM = 1000.0  # ruckig is given metres


class MotionFault(RuntimeError):
    """ruckig refused a move: the message says which and why."""


@dataclass(frozen=True)
class LiftLimits:
    """Speed, acceleration and jerk of the tip's height (mm, s), and the highest the tip can go."""

    speed: float
    accel: float
    jerk: float
    top_mm: float


@dataclass(frozen=True)
class LiftTable:
    """A lift's times (m,), rising with the time across_s that the tip is above the gates.

    rise_s: from rest to the gate on the way up; total_s: from rest to rest; after_s: the break-off time. Beyond the
    last row rise_s stays and the others grow as across_s does.
    """

    across_s: FloatArray
    rise_s: FloatArray
    total_s: FloatArray
    after_s: FloatArray


@dataclass(frozen=True)
class Lift:
    """A move of the tip from rest at one height to rest at another, above both gates for as long as asked.

    gate_up_mm: height from which the tip may move sideways; gate_down_mm: height below which it may no longer;
    least_mm: height that is reached in any case.
    """

    from_mm: float
    to_mm: float
    gate_up_mm: float
    gate_down_mm: float
    least_mm: float
    limits: LiftLimits

    @cached_property
    def apex_mm(self) -> float:
        """Lowest turning point allowed."""
        return max(self.gate_up_mm, self.gate_down_mm, self.least_mm, self.from_mm, self.to_mm)

    @cached_property
    def _rise(self) -> Curve:
        """Up to a height from which rising further would not bring the tip above the gate any sooner."""
        highest = max(self.apex_mm, self.limits.top_mm)
        full = _move((self.from_mm, 0.0, 0.0), highest, self.limits, 0.0)
        if self.from_mm >= self.gate_up_mm:
            return _move((self.from_mm, 0.0, 0.0), self.apex_mm, self.limits, 0.0)
        crossing = _first_above(full, self.gate_up_mm)
        stopped = _stop(full.state(crossing), self.limits)
        return _move((self.from_mm, 0.0, 0.0), min(highest, max(self.apex_mm, stopped)), self.limits, 0.0)

    def broken_off(self, after_s: float) -> Curve:
        """The whole move, sent down after so long (from rest at time 0)."""
        rise = self._rise
        if after_s >= rise.end_s:
            top = float(rise.at(np.array([rise.end_s]))[0])
            down = _move((top, 0.0, 0.0), self.to_mm, self.limits, after_s)
            hover = [Curve.held(top, rise.end_s, after_s)] if after_s > rise.end_s + 1e-12 else []
            return Curve.joined([rise, *hover, down])
        down = _move(rise.state(after_s), self.to_mm, self.limits, after_s)
        return Curve.joined([rise, down]) if after_s > 1e-9 else down

    @cached_property
    def table(self) -> "LiftTable":
        """The move for break-off times from the soonest that clears the gates to the latest that helps."""
        rise = self._rise
        least = _bisect(lambda s: self.broken_off(s).extremes()[1] - self.apex_mm + 1e-9, 0.0, rise.end_s)
        # dense where the tip barely clears the gate: the time above grows like a square root there
        after = least + (rise.end_s - least) * np.linspace(0.0, 1.0, SAMPLES) ** 2
        across, ups, totals = np.empty(SAMPLES), np.empty(SAMPLES), np.empty(SAMPLES)
        for k, s in enumerate(after):
            curve = self.broken_off(float(s))
            ups[k], down = _first_above(curve, self.gate_up_mm), _last_above(curve, self.gate_down_mm)
            across[k], totals[k] = down - ups[k], curve.end_s
        across = np.maximum.accumulate(across) + 1e-12 * np.arange(SAMPLES)
        return LiftTable(across, ups, totals, after)

    def rise_s(self, across_s: float) -> float:
        """From rest to the gate, when the tip is to be above the gates for across_s."""
        return float(np.interp(across_s, self.table.across_s, self.table.rise_s))

    @cached_property
    def fall_s(self) -> float:
        """From the gate to rest at the end, after the longest ways across: the least it can be."""
        table = self.table
        return float(table.total_s[-1] - table.rise_s[-1] - table.across_s[-1])

    def total_s(self, across_s: float) -> float:
        """The whole move, from rest to rest, when the tip is to be above the gates for across_s."""
        table = self.table
        late = max(across_s - float(table.across_s[-1]), 0.0)
        return float(np.interp(across_s, table.across_s, table.total_s)) + late

    def curve(self, across_s: float) -> Curve:
        """The move that keeps the tip above the gates for across_s, from time 0."""
        table = self.table
        late = max(across_s - float(table.across_s[-1]), 0.0)
        k = int(np.searchsorted(table.across_s, across_s))
        if late > 0 or k == 0:
            return self.broken_off(float(table.after_s[min(k, SAMPLES - 1)]) + late)
        # between two rows the break-off time bends like a root: it is searched for by the time of the whole move
        wanted, low, high = self.total_s(across_s), float(table.after_s[k - 1]), float(table.after_s[k])
        if table.total_s[k] - table.total_s[k - 1] > EXACT_S:
            high = _root(lambda s: self.broken_off(s).end_s - wanted, low, high)
        return self.broken_off(high)


def _move(state: tuple[float, float, float], to_mm: float, limits: LiftLimits, start_s: float) -> Curve:
    """Time-optimal move of one height from a state to rest."""
    planner, trajectory, ask = ruckig.Ruckig(1), ruckig.Trajectory(1), ruckig.InputParameter(1)
    ask.max_velocity, ask.max_acceleration, ask.max_jerk = ([x / MM] for x in (limits.speed, limits.accel, limits.jerk))
    ask.current_position, ask.current_velocity, ask.current_acceleration = ([x / MM] for x in state)
    ask.target_position = [to_mm / MM]
    result = planner.calculate(ask, trajectory)
    if result < 0:
        raise MotionFault(f"no lift from {state[0]:.3f} mm to {to_mm:.3f} mm ({result})")
    return curves_of(trajectory, start_s, (MM,))[0]


def _stop(state: tuple[float, float, float], limits: LiftLimits) -> float:
    """Height at which a rising tip comes to rest soonest."""
    planner, trajectory, ask = ruckig.Ruckig(1), ruckig.Trajectory(1), ruckig.InputParameter(1)
    ask.control_interface = ruckig.ControlInterface.Velocity
    ask.max_velocity, ask.max_acceleration, ask.max_jerk = ([x / MM] for x in (limits.speed, limits.accel, limits.jerk))
    ask.current_position, ask.current_velocity, ask.current_acceleration = ([x / MM] for x in state)
    ask.target_velocity = [0.0]
    if planner.calculate(ask, trajectory) < 0:
        raise MotionFault(f"no stop from {state[0]:.3f} mm")
    return float(trajectory.at_time(trajectory.duration)[0][0] * MM)


def _first_above(curve: Curve, height: float) -> float:
    """First time the height is reached."""
    return _crossing(curve, height, rising=True)


def _last_above(curve: Curve, height: float) -> float:
    """Last time the height is reached."""
    return _crossing(curve, height, rising=False)


def _crossing(curve: Curve, height: float, rising: bool) -> float:
    """The first rise through, or last fall through, a height; the time of the apex where it is only just reached."""
    t = np.linspace(curve.start_s[0], curve.end_s, 129)
    heights = curve.at(t)
    above = np.flatnonzero(heights >= height)
    if not len(above):
        return float(t[np.argmax(heights)])
    k = int(above[0] if rising else above[-1])
    if (rising and k == 0) or (not rising and k == len(t) - 1):
        return float(t[k])
    outside, inside = (float(t[k - 1]), float(t[k])) if rising else (float(t[k + 1]), float(t[k]))
    x = inside
    for _ in range(60):  # Newton's steps, kept between a time below the height and one not below it
        z, speed, _ = curve.state(x)
        if z >= height:
            inside = x
        else:
            outside = x
        step = x - (z - height) / speed if speed else inside
        x = step if min(outside, inside) < step < max(outside, inside) else 0.5 * (outside + inside)
        if abs(inside - outside) < 1e-12 or (z >= height and z - height < 1e-12):
            break
    return inside


def _bisect(function: Callable[[float], float], low: float, high: float) -> float:
    """Where a function turns from negative (at low) to positive (at high); the positive side."""
    if function(low) >= 0:
        return low
    for _ in range(50):
        middle = 0.5 * (low + high)
        if function(middle) >= 0:
            high = middle
        else:
            low = middle
    return high


def _root(function: Callable[[float], float], low: float, high: float) -> float:
    """Where a rising function of times is 0 within EXACT_S: by false position, halved at every third step."""
    below, above = function(low), function(high)
    root = high
    for step in range(60):
        if above - below <= EXACT_S:
            break
        root = 0.5 * (low + high) if step % 3 == 2 else low - below * (high - low) / (above - below)
        value = function(root)
        if abs(value) <= EXACT_S:
            break
        if value > 0:
            high, above = root, value
        else:
            low, below = root, value
    return root
