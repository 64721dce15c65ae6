"""Policies: which grasp comes next, from what is known now.

`arrival` takes the part farthest downstream, `nearest` the one gripped soonest, `lookahead` the first of the best
sequence over the horizon. A policy of one's own is any object with `choose(choice) -> Picked | None`; it is given the
same `Choice` and no more.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Protocol

import numpy as np
from numpy.typing import NDArray

from pipeline.legs import LegTimes, Nodes
from pipeline.tray_order import Tray, TrayOrder, judged, time_left, to_go, tray_order

if TYPE_CHECKING:
    from pipeline.order.lookahead import PickSequence

FloatArray = NDArray[np.float64]
TRAVEL_SHARE = 0.06
FAR_S = 1e6
MOST_STATES = 2_000_000
STATES_PER_MS = 2000  # so a budget in ms gives the same answer on any machine; one core looks at 2,000 to 7,500
MS_A_PART = 0.8  # in view: to work out its grasps and legs, about, on one core
MOST_LOOKED_AT = 14  # parts: the exact look-ahead doubles its work with each


@dataclass(frozen=True)
class Choice:
    """What a policy may choose from: g grasps of n parts, at time now_s.

    nodes: the grasps. weights (n,): worth of each part. along_mm (n,): how far along the heading each is. blocked_by
    (n,): bit p set where part p must go first; such a part's grasps can't be next. legs(later): leg times, from here
    and now, or from every grasp at any time. travel() (g+1, g): joint travel from row to column, in s at full speed.
    numbers (n,): of the parts. start (4,): joints of the arm at rest. tray(): where nothing moves and more than
    MOST_LOOKED_AT parts lie there, the whole tray as it was when last looked at, and how many slots of each queue
    have been filled since (q,); otherwise None.
    """

    now_s: float
    nodes: Nodes
    weights: FloatArray
    along_mm: FloatArray
    blocked_by: NDArray[np.int64]
    legs: Callable[[bool], LegTimes]
    travel: Callable[[], FloatArray]
    numbers: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))
    start: FloatArray = field(default_factory=lambda: np.zeros(4))
    tray: Callable[[], tuple[Tray, NDArray[np.int64]] | None] = lambda: None

    def next_ones(self) -> tuple[FloatArray, FloatArray]:
        """Contact and finish (g,) of each grasp taken next; inf where it can't be."""
        times = self.legs(False)
        free = self.blocked_by[self.nodes.part] == 0
        return np.where(free, times.contact[0, :, 0], np.inf), np.where(free, times.finish[0, :, 0], np.inf)


@dataclass(frozen=True)
class Picked:
    """The grasp chosen, and how good the choice is.

    nodes: the whole sequence in view, the chosen one first. weight, finish_s: what it picks, when it ends (joint travel
    counted in). weight_bound: no sequence over the same parts picks more. finish_bound_s: none that picks as much ends
    sooner. states: how many partial sequences were looked at.
    """

    node: int
    nodes: tuple[int, ...] = ()
    weight: float = 0.0
    finish_s: float = np.inf
    weight_bound: float = np.inf
    finish_bound_s: float = -np.inf
    states: int = 0


class Policy(Protocol):
    """A rule that chooses the next grasp."""

    def choose(self, choice: Choice) -> Picked | None:
        """The next grasp, or None to wait for more to be known."""


class Arrival:
    """The part farthest downstream, by the grasp that is done soonest."""

    def choose(self, choice: Choice) -> Picked | None:
        """See Policy."""
        _, finish = choice.next_ones()
        able = np.flatnonzero(np.isfinite(finish))
        if not len(able):
            return None
        along = choice.along_mm[choice.nodes.part[able]]
        return _one(choice, int(able[np.lexsort((finish[able], -along))[0]]), finish)


class Nearest:
    """The grasp that is made soonest."""

    def choose(self, choice: Choice) -> Picked | None:
        """See Policy."""
        contact, finish = choice.next_ones()
        if not np.isfinite(contact).any():
            return None
        return _one(choice, int(np.lexsort((finish, contact))[0]), finish)


def nearest_of(choice: Choice, number: int) -> Picked | None:
    """The grasp of one part, by its number, that is made soonest; None where it can't be had next."""
    contact, finish = choice.next_ones()
    contact = np.where(choice.numbers[choice.nodes.part] == number, contact, np.inf)
    finish_of = np.where(np.isfinite(contact), finish, np.inf)
    return _one(choice, int(np.lexsort((contact, finish_of))[0]), finish) if np.isfinite(contact).any() else None


def _one(choice: Choice, node: int, finish: FloatArray) -> Picked:
    return Picked(node, (node,), float(choice.weights[choice.nodes.part[node]]), float(finish[node]))


class Lookahead:
    """The first grasp of the sequence that picks most weight and then ends first (or, for `travel`, moves least).

    Each leg's joint travel counts as TRAVEL_SHARE of its time when ends are compared: where the arm has to wait for a
    part anyway, or two sequences end together, the one that moves less is taken. A tray of more than
    MOST_LOOKED_AT parts is ordered whole, once, within one budget. Of a budget one half is for sequences; the other
    is for grasps and legs, and bounds how many parts are looked at together (`parts_within`).
    """

    def __init__(self, objective: str = "picks", budget_ms: float | None = None) -> None:
        from pipeline.order.lookahead import best_pick_sequence  # loaded before the clock starts, not for other rules

        self._best_sequence = best_pick_sequence
        self._kept: tuple[Tray, TrayOrder, Tray] | None = None  # as it is, its order, and with what that counts as cost
        self.by_travel, self.budget_ms = objective == "travel", budget_ms
        self.budget_states = MOST_STATES if budget_ms is None else max(int(budget_ms / 2 * STATES_PER_MS), 1)

    def choose(self, choice: Choice) -> Picked | None:
        """See Policy."""
        whole = choice.tray()
        if whole is not None:
            return self._on_tray(choice, *whole)
        best = self.best(choice)
        if not best.nodes:
            return None
        sure = -np.inf if best.cut or self.by_travel else best.finish
        return Picked(best.nodes[0], best.nodes, best.weight, best.finish, best.weight_bound, sure, best.states)

    def best(self, choice: Choice, alternatives: bool = False) -> "PickSequence":
        """The best sequence; with `alternatives` also the best that starts with each grasp."""
        times = choice.legs(True)
        rows = np.concatenate([[0], times.start_of])
        travel = choice.travel()
        return self._best_sequence(
            times.finish[rows] + TRAVEL_SHARE * travel[:, :, None], choice.nodes.part, choice.weights,
            choice.blocked_by, choice.now_s, float(times.start_s[0]), float(times.start_s[1] - times.start_s[0]),
            travel=travel if self.by_travel else None, budget_states=self.budget_states, alternatives=alternatives,
        )  # fmt: skip

    def _on_tray(self, choice: Choice, tray: Tray, used: NDArray[np.int64]) -> Picked | None:
        """The next of the whole tray's order, which is kept as long as the tray is the same."""
        if self._kept is None or self._kept[0] is not tray:
            found = tray_order(tray, self.by_travel, self.budget_ms)
            self._kept = tray, found, judged(tray, found.time_share)
        _, whole, cost = self._kept
        row_of, (_, finish) = {int(number): k for k, number in enumerate(choice.numbers)}, choice.next_ones()
        spent = np.where(np.isfinite(finish), finish - choice.now_s, np.inf)
        if whole.time_share < 1.0:
            spent = np.where(np.isfinite(finish), whole.time_share * np.nan_to_num(spent, posinf=0.0)
                             + (1.0 - whole.time_share) * choice.travel()[0], np.inf)
        left = [part for part in whole.order if int(tray.numbers[part]) in row_of]
        for k, part in enumerate(left):
            nodes = np.flatnonzero((choice.nodes.part == row_of[int(tray.numbers[part])]) & np.isfinite(finish))
            if len(nodes):
                queue, filled, rest = tray.queue[part], used.copy(), np.array(left[:k] + left[k + 1 :], np.int64)
                filled[queue] += 1
                after = to_go(cost, rest, filled)
                ways = slice(*tray.slots[queue, filled[queue] - 1 : filled[queue] + 1])
                same = (choice.nodes.drop[nodes][:, None] == tray.rests[ways][None]).all(axis=2)
                ends = spent[nodes, None] + np.where(same, after[ways], np.inf)
                ends = np.where(np.isfinite(ends), ends, FAR_S + spent[nodes, None])
                best, way = np.unravel_index(int(np.argmin(ends)), ends.shape)
                rest = rest[np.isin(rest, whole.order[: whole.picked])]
                ends_s = finish[nodes[best]] + time_left(tray, cost, rest, filled, int(way) + ways.start)
                return _of_tray(choice, int(nodes[best]), float(ends_s), tray, whole, row_of)
        return None


def _of_tray(choice: Choice, node: int, ends_s: float, tray: Tray, order: TrayOrder, row_of: dict[int, int]) -> Picked:
    weight = sum(float(tray.weights[part]) for part in order.order[: order.picked] if int(tray.numbers[part]) in row_of)
    begun = len(row_of) == len(order.order)
    return Picked(node, (node,), weight, ends_s, float(choice.weights.sum()),
                  choice.now_s + order.bound_s if begun and order.bound_s else -np.inf, order.steps)


def parts_within(horizon: int, budget_ms: float | None) -> int:
    """How many of `horizon` parts can be looked at together in half a budget: by count, so the same on any machine."""
    return horizon if budget_ms is None else min(horizon, max(int(budget_ms / 2 / MS_A_PART), 1))


POLICIES = ("arrival", "nearest", "lookahead")


def policy_named(name: str, objective: str = "picks", budget_ms: float | None = None) -> Policy:
    """The policy of this name, which takes about budget_ms at most; raises KeyError for a name there is none of."""
    made: dict[str, Callable[[], Policy]] = {
        "arrival": Arrival, "nearest": Nearest, "lookahead": lambda: Lookahead(objective, budget_ms),
    }  # fmt: skip
    return made[name]()
