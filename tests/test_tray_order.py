"""A whole tray is ordered at once: exact on few parts, sooner than the rules on many, and within its own bound."""

from dataclasses import replace
from itertools import permutations

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from some_streams import Laid, Stream, tray

from pipeline.policy import Lookahead, policy_named
from pipeline.replay import Run, replay
from pipeline.study import policy_of, run
from pipeline.tables import joint_travel
from pipeline.tray_order import Tray, along, judged, to_go, travel_of, tray_order

SMALL = {"grasp_mm": 3.0, "height_mm": 6.0, "outline_radius_mm": 7.0}
BOXES = [{"name": name, "origin_mm": [-150.0, y, -40.0], "columns": 20, "rows": 5, "pitch_mm": [14.0, 12.0],
          "endless": True} for name, y in (("left", 230.0), ("right", -300.0))]  # fmt: skip


def made(seed: int, parts: int, queues: int, left_s: float = np.inf) -> Tray:
    """Legs as long as plane distances and a little more, some not to be had, some parts behind others."""
    random = np.random.default_rng(seed)
    holds, ways = 3, 3
    at, slots = random.uniform(0, 1, (parts, 2)), random.uniform((1.5, 0), (2.5, 1), (queues * parts, 2))
    apart = np.linalg.norm(np.repeat(slots, ways, axis=0)[:, None] - np.repeat(at, holds, axis=0)[None], axis=2)
    out, carry = apart + random.uniform(0, 0.4, apart.shape), (apart + random.uniform(0, 0.4, apart.shape)).T.copy()
    carry[random.random(carry.shape) < 0.2] = np.inf
    out = np.vstack([out, random.uniform(1, 2, (1, parts * holds))])
    first = np.arange(queues)[:, None] * parts * ways + np.arange(parts + 1) * ways
    return Tray(np.arange(parts), np.arange(parts + 1) * holds, random.integers(0, queues, parts), first, out, carry,
                random.integers(1, 3, parts).astype(float), np.triu(random.random((parts, parts)) < 0.1, 1), left_s,
                0.1, np.zeros((queues * parts * ways, 4)), random.uniform(0, 2, out.shape),
                random.uniform(0, 2, carry.shape))  # fmt: skip


def followed(one: Tray, order: tuple[int, ...]) -> tuple[float, float]:
    """Weight and finish of an order by plain NumPy; parts that can't be had when their turn comes are left out."""
    reach, stand, weight, used, done = np.zeros(1), np.array([len(one.out) - 1]), 0.0, [0] * len(one.slots), set()
    for part in order:
        q = one.queue[part]
        if not set(np.flatnonzero(one.after[part]).tolist()) <= done:
            continue
        to = np.arange(one.slots[q, used[q]], one.slots[q, used[q] + 1])
        hold = np.arange(one.begins[part], one.begins[part + 1])
        contact = (reach[:, None] + one.out[np.ix_(stand, hold)]).min(axis=0)
        contact[contact > one.left_s - one.grasp_s] = np.inf
        ahead = (contact[:, None] + one.carry[np.ix_(hold, to)]).min(axis=0)
        if np.isfinite(ahead).any():
            reach, stand, weight = ahead, to, weight + one.weights[part]
            used[q] += 1
            done.add(part)
    return weight, float(reach.min())


@settings(max_examples=12, deadline=None)
@example(87253, 6, 2, 12.0)  # the soonest end grips the last part too late
@given(st.integers(0, 10**6), st.integers(1, 6), st.integers(1, 2), st.sampled_from([np.inf, 12.0, 6.0]))
def test_no_order_of_few_parts_is_better(seed: int, parts: int, queues: int, left_s: float) -> None:
    """Brute force over every order, also with parts that wait for others and a tray that is taken away."""
    one = made(seed, parts, queues, left_s)
    best = min(((-weight, finish) for weight, finish in (followed(one, o) for o in permutations(range(parts)))))
    found = tray_order(one)
    assert (-found.weight, found.finish_s) == pytest.approx(best, abs=1e-9)
    assert followed(one, found.order) == pytest.approx((found.weight, found.finish_s), abs=1e-9)
    assert found.bound_s <= found.finish_s + 1e-9


@settings(max_examples=12, deadline=None)
@example(87253, 6, 2, 12.0)  # the soonest end grips the last part too late
@given(st.integers(0, 10**6), st.integers(1, 6), st.integers(1, 2), st.sampled_from([np.inf, 12.0, 6.0]))
def test_no_order_of_few_parts_moves_less(seed: int, parts: int, queues: int, left_s: float) -> None:
    """By travel: as much weight as any order, and where the tray stays, the least joint travel of all orders."""
    one = made(seed, parts, queues, left_s)
    most = max(followed(one, order)[0] for order in permutations(range(parts)))
    found = tray_order(one, by_travel=True)
    assert found.weight == pytest.approx(most)
    contact_s, _ = along(one.out, one.carry, found.ways)
    assert (contact_s <= left_s - one.grasp_s + 1e-9).all()
    assert travel_of(one, found.ways) == found.travel_s
    if np.isinf(left_s):
        least = min((-weight, moved) for weight, moved in
                    (followed(judged(one, 0.0), order) for order in permutations(range(parts))))
        assert (-found.weight, found.travel_s) == pytest.approx(least)
        assert found.travel_bound_s <= found.travel_s + 1e-9


def test_a_budget_gives_the_best_so_far_and_its_gap() -> None:
    """The same each time, no better than with more, and never beyond what its gap tells."""
    one = replace(made(5, 60, 2), after=np.zeros((60, 60), bool))
    hasty, whole = tray_order(one, budget_ms=1.0), tray_order(one)
    assert hasty == tray_order(one, budget_ms=1.0)
    assert hasty.cut
    assert not whole.cut
    assert hasty.steps < whole.steps / 10
    assert hasty.picked == whole.picked == 60
    assert whole.finish_s < hasty.finish_s
    assert hasty.finish_s * (1 - hasty.gap) <= whole.finish_s
    assert 0 < whole.gap < hasty.gap < 0.2


@pytest.mark.parametrize("seed", range(2))
def test_eight_parts_are_ordered_as_brute_force_does(seed: int) -> None:
    one = made(seed, 8, 1 + seed)
    best = min((-weight, finish) for weight, finish in (followed(one, order) for order in permutations(range(8))))
    assert (-tray_order(one).weight, tray_order(one).finish_s) == pytest.approx(best, abs=1e-9)


@pytest.mark.parametrize(("queues", "share"), [(1, 1.03), (2, 1.05)])
def test_sixty_parts_end_near_the_bound(queues: int, share: float) -> None:
    """The bound knows nothing of who waits for whom, so nobody does; that of several queues is the looser one."""
    one = replace(made(5, 60, queues), after=np.zeros((60, 60), bool))
    found = tray_order(one)
    assert found.picked == 60
    assert found.bound_s <= found.finish_s <= share * found.bound_s


def test_what_is_left_to_go_adds_up() -> None:
    """From the start to the end: the time of the order."""
    one = made(3, 12, 2)
    found = tray_order(one)
    assert found.picked == 12
    rest = to_go(one, np.array(found.order), np.zeros(2, np.int64))
    assert rest[-1] == pytest.approx(found.finish_s, abs=1e-9)


def strewn(number: int, apart_mm: float, **changes: object) -> Stream:
    """Parts of two kinds all over the reach of the plain arm, each kind with a place of its own."""
    random, laid = np.random.default_rng(number), list[Laid]()
    while len(laid) < number:
        x, y = random.uniform((170, -250), (400, 170))
        if 190 < np.hypot(x, y) < 430 and all(np.hypot(x - o.x_mm, y - o.y_mm) > apart_mm for o in laid):
            laid.append(Laid(x, y, float(random.uniform(-180, 180)), ("lever", "gem")[len(laid) % 2]))
    parts = {"lever": {**SMALL, "places": ["left"]}, "gem": {**SMALL, "places": ["right"]}}
    return tray(laid, 1, places=BOXES, parts=parts, tool__footprint_mm=[], **changes)


def ends_s(done: Run) -> float:
    return done.picks[-1].cycle.release_end_s - done.picks[0].decided_s


@pytest.mark.parametrize(("number", "apart_mm"), [(60, 26.0), (110, 19.0)])
def test_a_tray_is_emptied_sooner_than_by_the_rules(number: int, apart_mm: float) -> None:
    """And when its first decision says, within 1 ms a pick; all parts in view at once."""
    setting = strewn(number, apart_mm).setting()
    ends = {}
    for name in ("arrival", "nearest", "lookahead"):
        done = replay(setting, policy_named(name), name, 200)
        assert len(done.picks) == number
        ends[name] = ends_s(done)
    assert ends["lookahead"] < min(ends["arrival"], ends["nearest"])
    first = done.picks[0]
    assert first.looked_at == number
    assert first.picked.finish_s - first.decided_s == pytest.approx(ends["lookahead"], abs=1e-3 * number)
    assert first.picked.finish_bound_s <= first.picked.finish_s


def test_a_tray_by_travel_moves_the_joints_less() -> None:
    """A tenth less for a few seconds more, all picked either way; and a decision tells when the tray will be empty."""
    setting = strewn(40, 30.0).setting()
    quick, calm = (replay(setting, Lookahead(objective), "some", 200) for objective in ("picks", "travel"))
    assert len(quick.picks) == len(calm.picks) == 40
    assert joint_travel(calm).sum() < 0.9 * joint_travel(quick).sum()
    assert ends_s(quick) < ends_s(calm) < 1.1 * ends_s(quick)
    for done in (quick, calm):
        first = done.picks[0]
        assert first.picked.finish_s - first.decided_s == pytest.approx(ends_s(done), abs=0.04)


def test_a_budget_bounds_what_is_looked_at_on_a_tray() -> None:
    """Everything is picked all the same."""
    setting = strewn(40, 30.0).setting()
    hasty, whole = (replay(setting, policy_of(setting, "lookahead", budget), "some", 200) for budget in (1.0, 0.0))
    assert len(hasty.picks) == len(whole.picks) == 40
    assert hasty.picks[0].picked.states < whole.picks[0].picked.states / 4
    assert ends_s(whole) < ends_s(hasty)


def test_a_horizon_that_is_set_limits_the_tray() -> None:
    """Unset, the whole tray is in view."""
    stream = strewn(20, 40.0)
    assert stream.cell.horizon == 200
    done = run(stream.setting(), "lookahead", 5)
    assert max(pick.looked_at for pick in done.picks) == 5
    assert strewn(3, 40.0, order__horizon=5).cell.horizon == 5


def test_a_tray_that_is_taken_away_loses_the_least() -> None:
    """No fewer than by arrival, and nothing gripped too late."""
    laid = strewn(40, 30.0)
    stream = Stream((*laid.laid, Laid(250.0, 0.0, first=1)), np.array([0.0, 30.0]), np.zeros(2, int), laid.changes)
    picks = {name: run(stream.setting(), name, 200).picks for name in ("arrival", "lookahead")}
    assert 5 < len(picks["arrival"]) <= len(picks["lookahead"]) < 41
    assert all(pick.cycle.grasp_end_s <= 30.0 for pick in picks["lookahead"] if pick.decided_s < 30.0)
