"""A good order under windows and precedence: take some items out, put them back where they cost least, again and again.

Ruin and recreate (Schrimpf, Schneider, Stamm-Wilbrandt & Dueck 2000) with strings of neighbours taken out and items
that keep failing to fit gaining in urgency (Christiaens & Vanden Berghe 2020). An insertion is judged in constant time:
what follows a place is summed up by the latest start that breaks no window and by the end as a function of the start,
max(held, start + run) (Savelsbergh 1992).
"""

import numpy as np
from numpy.typing import NDArray

from pipeline.order.chance import State, draw, pick, seeded
from pipeline.order.compiled import compiled

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

HAIR = 1e-9
START, LATEST, HELD, RUN = 0, 1, 2, 3  # rows of the schedule: of each place in the order, and of the end


@compiled("i8(f8[:,::1], f8[::1], f8[::1], i8[::1], i8, f8[:,::1])")
def _schedule(
    go: FloatArray, early: FloatArray, late: FloatArray, order: IntArray, size: int, schedule: FloatArray,
) -> int:
    """Time the order, items that would be late taken out of it; its size then. The schedule is filled in."""
    time, at, kept = 0.0, 0, 0
    for i in range(size):
        k = order[i]
        then = max(time + go[at, k], early[k])
        if then <= late[k] and then < np.inf:
            order[kept] = k
            schedule[START, kept] = then
            time, at, kept = then, k, kept + 1
    schedule[LATEST, kept], schedule[HELD, kept], schedule[RUN, kept] = np.inf, -np.inf, 0.0
    for i in range(kept - 1, -1, -1):
        k, then = order[i], order[i + 1] if i + 1 < kept else 0
        leg = go[k, then]
        begin = early[then] if then else -np.inf
        schedule[LATEST, i] = min(late[k], schedule[LATEST, i + 1] - leg)
        schedule[HELD, i] = max(schedule[HELD, i + 1], begin + schedule[RUN, i + 1])
        schedule[RUN, i] = schedule[RUN, i + 1] + leg
    return kept


@compiled("Tuple((f8, f8))(f8[:,::1], f8[:,::1], i8[::1], i8, f8[:,::1], b1)")
def _worth(
    go: FloatArray, cost: FloatArray, order: IntArray, size: int, schedule: FloatArray, waits: bool,
) -> tuple[float, float]:
    """The objective of an order, and the sum of its legs."""
    if size == 0:
        return 0.0, 0.0
    travel, at = 0.0, 0
    for i in range(size):
        travel += cost[at, order[i]]
        at = order[i]
    travel += cost[at, 0]
    return (schedule[START, size - 1] + go[at, 0] if waits else travel), travel


@compiled("Tuple((i8, f8))(f8[:,::1], f8[:,::1], f8[::1], f8[::1], b1[:,::1], i8[::1], i8, f8[:,::1], b1, i8, f8)")
def _best_place(
    go: FloatArray, cost: FloatArray, early: FloatArray, late: FloatArray, before: NDArray[np.bool_],
    order: IntArray, size: int, schedule: FloatArray, waits: bool, k: int, mix: float,
) -> tuple[int, float]:
    """The place where an item costs least (-1: none), by the objective and `mix` times the detour."""
    first, last = 0, size
    for i in range(size):
        if before[order[i], k]:
            first = i + 1
        if before[k, order[i]]:
            last = min(last, i)
    place, least = -1, np.inf
    for i in range(first, last + 1):
        p = order[i - 1] if i else 0
        then = order[i] if i < size else 0
        time = max((schedule[START, i - 1] if i else 0.0) + go[p, k], early[k])
        if time > late[k]:
            continue
        arrives = time + go[k, then]
        if i < size:
            arrives = max(arrives, early[then])
        if arrives > schedule[LATEST, i] or not arrives < np.inf:
            continue
        detour = cost[p, k] + cost[k, then] - (cost[p, then] if size else 0.0)
        score = max(schedule[HELD, i], arrives + schedule[RUN, i]) + mix * detour if waits else detour
        if score < least:
            place, least = i, score
    return place, least


@compiled("i8(u8[::1], i8[:,::1], i8[::1], i8, i8[::1])")
def _take_out(chance: State, near: IntArray, order: IntArray, size: int, out: IntArray) -> int:
    """Take up to a dozen items out of the order: a string of it, one and its nearest, or any; marks and counts them."""
    if size == 0:
        return 0
    most = min(size, 1 + pick(chance, 12))
    kind, centre = pick(chance, 3), pick(chance, size)
    taken = 0
    if kind == 0:
        for i in range(most):
            out[order[(centre + i) % size]] = 1
    elif kind == 1:
        out[order[centre]] = 1
        for k in near[order[centre]]:
            if taken + 1 >= most:
                break
            if k:
                out[k] = 1
                taken += 1
    else:
        for _ in range(most):
            out[order[pick(chance, size)]] = 1
    kept = 0
    for i in range(size):
        if not out[order[i]]:
            order[kept] = order[i]
            kept += 1
    return kept


@compiled("i8(b1[:,::1], i8[::1], i8, i8[::1])")
def _drop_unfounded(before: NDArray[np.bool_], order: IntArray, size: int, present: IntArray) -> int:
    """Take out the items whose predecessors are not in the order; its size then."""
    kept = 0
    for i in range(size):
        founded = True
        for j in range(1, len(before)):
            if before[j, order[i]] and not present[j]:
                founded = False
        if founded:
            order[kept] = order[i]
            kept += 1
    return kept


@compiled("void(u8[::1], i8[::1], i8, f8[::1], f8[::1], f8[::1])")
def _line_up(
    chance: State, absent: IntArray, count: int, late: FloatArray, weight: FloatArray, sore: FloatArray,
) -> None:
    """Put the absent items in the order of their turn: at random, the most urgent or the weightiest first."""
    kind = pick(chance, 4)
    keys = np.empty(count)
    for i in range(count):
        k = absent[i]
        keys[i] = draw(chance)
        if kind == 1:
            keys[i] = late[k] if late[k] < np.inf else 1e300
        elif kind == 2:
            keys[i] -= sore[k] * weight[k]
    ranked = absent[:count][np.argsort(keys)]
    absent[:count] = ranked


@compiled(
    "i8(u8[::1], f8[:,::1], f8[:,::1], f8[::1], f8[::1], f8[::1], f8[::1], b1[:,::1], b1, i8[::1], i8, f8[:,::1])")
def _recreated(
    chance: State, go: FloatArray, cost: FloatArray, early: FloatArray, late: FloatArray, weight: FloatArray,
    sore: FloatArray, before: NDArray[np.bool_], waits: bool, order: IntArray, size: int, schedule: FloatArray,
) -> int:
    """Put into the order what is not in it and fits, and leave it sound; its size then."""
    nodes = len(go)
    present = np.zeros(nodes, np.int64)
    size = _schedule(go, early, late, order, size, schedule)
    present[order[:size]] = 1
    absent, count = np.empty(nodes, np.int64), 0
    for k in range(1, nodes):
        if not present[k]:
            absent[count] = k
            count += 1
    _line_up(chance, absent, count, late, weight, sore)
    mix = 0.5 * draw(chance) ** 2
    for i in range(count):
        k = absent[i]
        place, _ = _best_place(go, cost, early, late, before, order, size, schedule, waits, k, mix)
        if place >= 0:
            for j in range(size, place, -1):
                order[j] = order[j - 1]
            order[place] = k
            size = _schedule(go, early, late, order, size + 1, schedule)
            present[k] = 1
    while True:
        present[:] = 0
        present[order[:size]] = 1
        sound = _schedule(go, early, late, order, _drop_unfounded(before, order, size, present), schedule)
        if sound == size:
            return size
        size = sound


@compiled(
    "Tuple((i8, f8, f8))(f8[:,::1], f8[:,::1], f8[::1], f8[::1], f8[::1], b1[:,::1], i8[:,::1], b1, i8[::1], i8, f8, "
    "i8, i8, f8)")
def improve_order(
    go: FloatArray, cost: FloatArray, early: FloatArray, late: FloatArray, weight: FloatArray,
    before: NDArray[np.bool_], near: IntArray, waits: bool, order: IntArray, size: int, target: float, rounds: int,
    seed: int, warmth: float,
) -> tuple[int, float, float]:
    """Improve the first `size` items of `order` (N - 1,) in place; size, weight lost and value of the best found.

    Stops after `rounds`, or when nothing is lost and the value is `target` or less. An order that loses as much is
    gone on from if it is worse by no more than `warmth` times a random number that thins out as rounds are spent.
    """
    chance = seeded(seed)
    nodes = len(go)
    schedule = np.empty((4, nodes + 1))
    out, sore = np.zeros(nodes, np.int64), np.ones(nodes)
    whole = weight.sum()
    size = _recreated(chance, go, cost, early, late, weight, sore, before, waits, order, size, schedule)
    now, now_size = order.copy(), size
    value, travel = _worth(go, cost, order, size, schedule, waits)
    now_lost = now_sore = whole - weight[order[:size]].sum()
    now_value = value + 1e-3 * travel if value < np.inf else np.inf
    best, best_size, best_lost, best_value = order.copy(), size, now_lost, value
    for step in range(rounds):
        if best_lost <= HAIR and best_value <= target + HAIR:
            break
        order[:] = now
        out[:] = 0
        size = _take_out(chance, near, order, now_size, out)
        size = _recreated(chance, go, cost, early, late, weight, sore, before, waits, order, size, schedule)
        value, travel = _worth(go, cost, order, size, schedule, waits)
        if not value < np.inf:
            continue
        lost = sore_lost = whole - weight[order[:size]].sum()
        if lost > HAIR:
            out[:] = 1
            out[order[:size]] = 0
            sore_lost, now_sore = 0.0, 0.0
            for k in range(1, nodes):
                sore_lost += out[k] * weight[k] * sore[k]
                now_sore += weight[k] * sore[k]
            for i in range(now_size):
                now_sore -= weight[now[i]] * sore[now[i]]
            for k in range(1, nodes):
                sore[k] += 0.01 * out[k]
        else:
            sore_lost = lost
        energy = value + 1e-3 * travel
        cool = warmth * draw(chance) * (1.0 - step / rounds)
        if lost < best_lost - HAIR or (lost <= best_lost + HAIR and value < best_value - HAIR):
            best_size, best_lost, best_value = size, lost, value
            best[:] = order
        if (lost < now_lost - HAIR or sore_lost < now_sore - HAIR
                or (lost <= now_lost + HAIR and energy <= now_value + cool)):
            now[:], now_size, now_lost, now_value = order, size, lost, energy
            now_sore = sore_lost
    order[:] = best
    return best_size, best_lost, best_value
