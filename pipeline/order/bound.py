"""Lower bounds, on a round through every node above all: assignment, and trees made round by prices on nodes.

The 1-tree ascent is Held & Karp (1970; 1971), its step that of Held, Wolfe & Crowder (1974). For legs that differ by
direction each node has two prices, one to leave and one to enter, and the tree takes the cheaper direction of each
pair: the 1-tree of the symmetric graph with every node split in two (Jonker & Volgenant 1983), split edges contracted.
"""

import numpy as np
from numpy.typing import NDArray

from pipeline.order.compiled import compiled
from pipeline.order.cuts import price_sets
from pipeline.order.task import Task

FloatArray = NDArray[np.float64]
SET_TURNS = 6


@compiled("Tuple((f8, f8[::1], f8[::1], i8[::1]))(f8[:,::1])")
def assignment(cost: FloatArray) -> tuple[float, FloatArray, FloatArray, NDArray[np.int64]]:
    """Least sum with every node left and entered once, prices u, v with u_i + v_j <= cost_ij that add up to it, and
    the node that follows each.

    Shortest augmenting paths (Kuhn 1955; Jonker & Volgenant 1987), O(N^3). The diagonal must hold what forbids it.
    """
    size = len(cost)
    u, v = np.zeros(size + 1), np.zeros(size + 1)
    row_of = np.zeros(size + 1, np.int64)  # row matched to a column; rows and columns counted from 1, 0 is none
    for row in range(1, size + 1):
        row_of[0] = row
        column = 0
        least, came = np.full(size + 1, np.inf), np.zeros(size + 1, np.int64)
        used = np.zeros(size + 1, np.bool_)
        while row_of[column] != 0:
            used[column] = True
            i, step, nearest = row_of[column], np.inf, 0
            for j in range(1, size + 1):
                if not used[j]:
                    reduced = cost[i - 1, j - 1] - u[i] - v[j]
                    if reduced < least[j]:
                        least[j], came[j] = reduced, column
                    if least[j] < step:
                        step, nearest = least[j], j
            for j in range(size + 1):
                if used[j]:
                    u[row_of[j]] += step
                    v[j] -= step
                else:
                    least[j] -= step
            column = nearest
        while column:
            row_of[column] = row_of[came[column]]
            column = came[column]
    then = np.empty(size, np.int64)
    for j in range(1, size + 1):
        then[row_of[j] - 1] = j - 1
    return u[1:].sum() + v[1:].sum(), u[1:].copy(), v[1:].copy(), then


@compiled("f8(f8[:,::1], f8[::1], f8[::1], b1, i8[::1], i8[::1])")
def one_tree(
    cost: FloatArray, leave: FloatArray, enter: FloatArray, symmetric: bool, out: NDArray[np.int64],
    into: NDArray[np.int64],
) -> float:
    """Least 1-tree with node 0 the one of degree two, priced; fills how often each node is left and entered."""
    size = len(cost)
    out[:], into[:] = 0, 0
    total = 0.0
    near, link, ahead = np.full(size, np.inf), np.zeros(size, np.int64), np.zeros(size, np.bool_)
    in_tree = np.zeros(size, np.bool_)
    node = 1
    for _ in range(size - 2):
        in_tree[node] = True
        then = -1
        for j in range(1, size):
            if in_tree[j]:
                continue
            forth = cost[node, j] + leave[node] + enter[j]
            back = forth if symmetric else cost[j, node] + leave[j] + enter[node]
            if min(forth, back) < near[j]:
                near[j], link[j], ahead[j] = min(forth, back), node, forth <= back
            if then < 0 or near[j] < near[then]:
                then = j
        total += near[then]
        tail, head = (link[then], then) if ahead[then] else (then, link[then])
        out[tail] += 1
        into[head] += 1
        node = then
    first, last = -1, -1
    for j in range(1, size):
        if first < 0 or cost[0, j] + enter[j] < cost[0, first] + enter[first]:
            first = j
    for j in range(1, size):
        if not (symmetric and j == first) and (last < 0 or cost[j, 0] + leave[j] < cost[last, 0] + leave[last]):
            last = j
    total += cost[0, first] + leave[0] + enter[first] + cost[last, 0] + leave[last] + enter[0]
    out[0], into[0] = 1, 1
    into[first] += 1
    out[last] += 1
    return float(total - leave.sum() - enter.sum())


@compiled("f8(f8[:,::1], b1, f8[::1], f8[::1], f8, i8)")
def ascent(
    cost: FloatArray, symmetric: bool, leave: FloatArray, enter: FloatArray, upper: float, rounds: int,
) -> float:
    """Best 1-tree bound over prices that start as given and climb; N >= 3; prices are left at the best found."""
    size = len(cost)
    out, into = np.zeros(size, np.int64), np.zeros(size, np.int64)
    was_out, was_into = np.zeros(size), np.zeros(size)
    best = -np.inf
    best_leave, best_enter = leave.copy(), enter.copy()
    step, stale = 1.0, 0
    for _ in range(rounds):
        bound = one_tree(cost, leave, enter, symmetric, out, into)
        if best == -np.inf or bound > best + 1e-9 * abs(best):
            best, stale = bound, 0
            best_leave[:], best_enter[:] = leave, enter
        else:
            stale += 1
            if stale >= 10:
                step, stale = step * 0.9, 0
        norm = 0.0
        for i in range(size):
            more, extra = out[i] - 1.0, into[i] - 1.0
            if symmetric:
                more = extra = (more + extra) / 2
            was_out[i], was_into[i] = 0.5 * more + 0.5 * was_out[i], 0.5 * extra + 0.5 * was_into[i]
            norm += was_out[i] ** 2 + was_into[i] ** 2
        if norm < 1e-12 or step < 1e-4 or best >= upper:
            break
        scale = step * max(upper - bound, 1e-3 * abs(upper)) / norm
        for i in range(size):
            leave[i] += scale * was_out[i]
            enter[i] += scale * was_into[i]
    leave[:], enter[:] = best_leave, best_enter
    return best


def priced_round(
    cost: FloatArray, upper: float, unit: float = 0.0, rounds: int = 3000,
) -> tuple[float, FloatArray, FloatArray]:
    """No round through all N nodes costs less (diagonal not used, inf where there is no leg), `upper`: a known one; and
    prices (N,) to leave and to enter each node, under which the legs of good rounds stand out.

    Where costs are whole numbers of a unit so is the least, and the bound is rounded up.
    """
    size = len(cost)
    if size < 3:
        least = float(sum(cost[i, (i + 1) % size] for i in range(size))) if size > 1 else 0.0
        return least, np.zeros(size), np.zeros(size)
    off = ~np.eye(size, dtype=bool)
    finite = cost[off & np.isfinite(cost)]
    forbidden = 2.0 * (float(finite.max(initial=0.0)) * size + abs(upper) + 1.0)
    filled = np.where(off & np.isfinite(cost), cost, forbidden)
    symmetric = bool(np.array_equal(filled, filled.T))
    bound, u, v, _ = assignment(filled)
    leave, enter = (np.zeros(size), np.zeros(size)) if symmetric else (-u, -v)
    bound = max(bound, ascent(filled, symmetric, leave, enter, upper, rounds))
    if not symmetric and bound < upper * (1.0 - 1e-9):
        bound = max(bound, _set_bound(filled, upper, rounds))
    if unit:
        bound = np.ceil(bound / unit - 1e-6) * unit
    return float(min(bound, upper)), leave, enter


def _set_bound(cost: FloatArray, upper: float, rounds: int) -> float:
    """Assignment and prices on sets by turns, each on what the one before left of the costs, then the ascent."""
    left, bound, size = cost.copy(), 0.0, len(cost)
    hair = 1e-12 * float(cost.max())
    for _ in range(SET_TURNS):
        more, u, v, _ = assignment(left)
        left = np.maximum(left - u[:, None] - v, 0.0)
        more += price_sets(left, False, hair) + price_sets(left, True, hair)
        bound += more
        if more <= 1e-6 * bound:
            break
    return float(bound + max(ascent(left, False, np.zeros(size), np.zeros(size), upper - bound, rounds), 0.0))


def round_bound(cost: FloatArray, upper: float, unit: float = 0.0, rounds: int = 3000) -> float:
    """The bound of `priced_round`."""
    return priced_round(cost, upper, unit, rounds)[0]


def shortest(go: FloatArray) -> FloatArray:
    """Shortest times through any nodes but the start (Floyd 1962; Warshall 1962)."""
    way = go.copy()
    for k in range(1, len(go)):
        np.minimum(way, way[:, k, None] + way[None, k], out=way)
    return way


def allowed(task: Task) -> NDArray[np.bool_]:
    """(N, N): whether an order that does every item can go straight from row to column."""
    soonest = np.maximum(task.early, shortest(task.go)[0])
    soonest[0] = 0.0
    may: NDArray[np.bool_] = soonest[:, None] + task.go <= task.late[None, :]
    between = (task.before.astype(np.int64) @ task.before.astype(np.int64)) > 0
    may &= ~task.before.T & ~between
    has_before, has_after = task.before.any(axis=0), task.before.any(axis=1)
    may[0, has_before] = False
    may[has_after, 0] = False
    np.fill_diagonal(may, False)
    return may


def whole_bound(task: Task, upper: float) -> float:
    """No order that does every item has a lower value; `upper`: the value of one."""
    bound = round_bound(np.where(allowed(task), task.cost, np.inf), upper, task.unit)
    if task.waits and len(task.go) > 1:
        way = shortest(task.go)
        latest_end = np.maximum(task.early, way[0])[1:] + way[1:, 0]
        bound = max(bound, float(latest_end.max()))
    return min(bound, upper)


def part_bound(task: Task, lost: float) -> float:
    """No order that loses at most so much weight has a lower value: as few items as can be, each entered the cheapest
    way there is, and the cheapest way back."""
    least = np.cumsum(np.sort(task.weight[1:])[::-1])
    count = int(np.searchsorted(least, task.weight.sum() - lost - 1e-9 * task.weight.sum()) + 1)
    if lost >= task.weight.sum() * (1 - 1e-9):
        return 0.0
    cost = np.where(np.eye(len(task.go), dtype=bool), np.inf, task.cost)
    return float(np.sort(cost.min(axis=0)[1:])[:count].sum() + cost[:, 0].min())
