"""A decision explained: what could be picked at that moment, what the order chose, and what else could come first."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pipeline.places import Filling
from pipeline.policy import MOST_LOOKED_AT, Arrival, Choice, Lookahead, Picked, Policy
from pipeline.replay import MOST_TRIES, Run, Setting
from pipeline.scene import Scene, SceneBuilder
from pipeline.trip import Pick
from pipeline.watch import Watch

FloatArray = NDArray[np.float64]
SAME_WEIGHT = 1e-9


@dataclass(frozen=True)
class Sequence:
    """Grasps in turn, the weight they pick, and when the arm has set down each, s; joint travel, s at full speed."""

    nodes: tuple[int, ...]
    weight: float
    finish_s: tuple[float, ...]
    travel_s: float

    @property
    def end_s(self) -> float:
        """When the last is set down."""
        return self.finish_s[-1]


@dataclass(frozen=True)
class Decision:
    """The choice that led to the first pick of a run.

    start_mm (2,): where the tool tip stands. chosen: the sequence in view. others: for every other part that can be
    picked next, the best that begins with it, in order of their worth.
    """

    setting: Setting
    scene: Scene
    start_mm: FloatArray
    picked: Picked
    chosen: Sequence
    others: tuple[Sequence, ...]

    @property
    def gap(self) -> float:
        """Share of the weight that a better sequence might pick more, at most."""
        bound = self.picked.weight_bound
        return 1 - self.chosen.weight / bound if np.isfinite(bound) and bound > 0 else 0.0

    @property
    def gap_of(self) -> str:
        """What the gap is a share of."""
        return "weight"

    def part_no(self, node: int) -> int:
        """Number of the part that a node grasps."""
        return self.scene.grasp(node)[0].part.number

    def at_mm(self, node: int) -> FloatArray:
        """Where the part that a node grasps lies at the moment of the decision, (2,) in the cell frame."""
        belt = self.setting.belt
        return self.scene.grasp(node)[0].xy_mm + belt.known_at(self.scene.choice.now_s).travel_mm * belt.heading

    def costs(self, other: Sequence) -> tuple[float, float]:
        """What beginning with another part costs against the chosen sequence: weight, and time in s."""
        return self.chosen.weight - other.weight, other.end_s - self.chosen.end_s


def first_decision(setting: Setting, policy: Policy, horizon: int, run: Run) -> Decision | None:
    """The decision behind a run's first pick; None where nothing was picked, for a whole tray of many parts (see
    `whole_tray`), and for one emptied in trips, which no decision over single picks led to."""
    if not run.picks or run.picks[0].looked_at > MOST_LOOKED_AT:
        return None
    if setting.cell.belt is None and any(pick.set_down for pick in run.picks):
        return None
    first, builder, filling = run.picks[0], builder_of(setting), Filling(tuple(setting.grasping.places.values()))
    for rule in (policy, Arrival()):  # a run may have fallen back to arrival
        banned: set[tuple[int, int]] = set()
        for _ in range(MOST_TRIES):
            scene = builder.scene(first.decided_s, first.cycle.start_joints, filling, horizon, banned)
            picked = rule.choose(scene.choice) if scene else None
            if scene is None or picked is None:
                break
            if _led_to(scene, picked, first):
                return _explained(setting, scene, setting.mover.arm.forward(first.cycle.start_joints)[:2], picked)
            banned |= scene.alike(picked.node)
    return None


def builder_of(setting: Setting) -> SceneBuilder:
    """What builds the scenes of a replay of its own."""
    watch = Watch(setting.cell, setting.recording, setting.belt, setting.parts)
    return SceneBuilder(setting.cell, watch, setting.grasping, setting.legs, setting.outlines, setting.least_score)


def _led_to(scene: Scene, picked: Picked, pick: Pick) -> bool:
    one, hold, drop, _ = scene.grasp(picked.node)
    made = pick.cycle.hold
    there = pick.set_down is not None or np.array_equal(drop, pick.cycle.end_joints)
    return (one.part.number == pick.part.number and there
            and (hold.yaw, hold.elbow, hold.turn) == (made.yaw, made.elbow, made.turn))


def _explained(setting: Setting, scene: Scene, start_mm: FloatArray, picked: Picked) -> Decision:
    choice, others = scene.choice, list[Sequence]()
    best = Lookahead(setting.cell.order.objective).best(choice, alternatives=True)
    for part in np.flatnonzero(np.arange(len(choice.weights)) != choice.nodes.part[picked.node]):
        ways = [timed(choice, nodes) for nodes in best.first_nodes if nodes and choice.nodes.part[nodes[0]] == part]
        others += [min(ways, key=_rank)] if ways else []
    return Decision(setting, scene, start_mm, picked, timed(choice, picked.nodes), tuple(sorted(others, key=_rank)))


def _rank(sequence: Sequence) -> tuple[float, float]:
    return -round(sequence.weight / SAME_WEIGHT) * SAME_WEIGHT, sequence.end_s


def timed(choice: Choice, nodes: tuple[int, ...]) -> Sequence:
    """A sequence of grasps with its times, from the legs the policy saw."""
    times, travel = choice.legs(True), choice.travel()
    step = float(times.start_s[1] - times.start_s[0])
    finish, row, now = list[float](), 0, choice.now_s
    for node in nodes:
        line = np.minimum.accumulate(times.finish[row, node, ::-1])[::-1]
        at = (now - times.start_s[0]) / step
        low = min(int(at), len(line) - 1)
        ahead = line[min(low + 1, len(line) - 1)] - line[low]
        now = float(line[low] + (at - low) * ahead) if at > low else float(line[low])
        finish.append(now)
        row = int(times.start_of[node])
    begun_at = [0, *(node + 1 for node in nodes[:-1])]
    return Sequence(nodes, float(choice.weights[choice.nodes.part[list(nodes)]].sum()), tuple(finish),
                    float(travel[begun_at, list(nodes)].sum()))


def told(decision: Decision) -> dict[str, Any]:
    """A decision in plain values: the order, what else could be next and what that costs, bound and gap."""
    choice, scene = decision.scene.choice, decision.scene

    def step(n: int, node: int, done_s: float) -> dict[str, Any]:
        one, hold, _, _ = scene.grasp(node)
        return {"pick": n, "part_no": one.part.number, "part": one.part.kind, "elbow": ("right", "left")[hold.elbow],
                "place": one.place, "slot": one.slot + 1, "done_s": round(done_s, 6)}

    def other(sequence: Sequence) -> dict[str, Any]:
        weight, time_s = decision.costs(sequence)
        return {"part_no": decision.part_no(sequence.nodes[0]), "weight": round(sequence.weight, 9),
                "end_s": round(sequence.end_s, 6), "weight_lost": round(weight, 9), "time_lost_s": round(time_s, 6),
                "travel_s": round(sequence.travel_s, 6), "order": [decision.part_no(node) for node in sequence.nodes]}

    chosen, bound = decision.chosen, decision.picked.weight_bound
    return {
        "now_s": round(choice.now_s, 6),
        "parts": len(choice.weights), "grasps": len(choice.nodes), "states": decision.picked.states,
        "weight": round(chosen.weight, 9), "end_s": round(chosen.end_s, 6), "travel_s": round(chosen.travel_s, 6),
        "weight_bound": round(bound, 9) if np.isfinite(bound) else None, "gap": round(decision.gap, 9),
        "order": [step(n, *one) for n, one in enumerate(zip(chosen.nodes, chosen.finish_s, strict=True), 1)],
        "next": [other(sequence) for sequence in decision.others],
    }  # fmt: skip
