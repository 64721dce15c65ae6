"""Kernels of the tray's order: an order followed turn by turn, what is left to go, and moves that gain.

Shared shapes as in `tray_order.Tray`; after (n, w): parts that must go before each, filled up with -1; due: latest
contact, s. Before each turn k: reach (n+1, r+1), the earliest time at each way to stand, of which at (n+1, 2) is the
range that counts; done (n+1, n); used (n+1, q) slots filled; weight (n+1,) picked.
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
HAIR = 1e-9
SAME_S = 1e-9
SCENE = "int64[::1], int64[::1], int64[:, ::1], float64[:, ::1], float64[:, ::1], float64[::1], int64[:, ::1], float64"


@njit(f"boolean({SCENE}, int64, float64[::1], int64[::1], boolean[::1], int64[::1], float64[::1], int64[::1])",
      cache=True, nogil=True)  # fmt: skip
def step(  # type: ignore[no-untyped-def]
    begins, queue, slots, out, carry, weights, after, due, part, reach, at, done, used, ahead, to,
) -> bool:
    """Pick a part next: from earliest times `reach` at the ways at[0] to at[1] to `ahead` at to[0] to to[1]."""
    q = queue[part]
    if done[part] or used[q] + 1 >= slots.shape[1]:
        return False
    for p in after[part]:
        if p >= 0 and not done[p]:
            return False
    to[0], to[1] = slots[q, used[q]], slots[q, used[q] + 1]
    found = False
    ahead[to[0] : to[1]] = np.inf
    for h in range(begins[part], begins[part + 1]):
        contact = np.inf
        for r in range(at[0], at[1]):
            contact = min(contact, reach[r] + out[r, h])
        if contact <= due:
            for r in range(to[0], to[1]):
                if contact + carry[h, r] < ahead[r]:
                    ahead[r] = contact + carry[h, r]
                    found = True
    if found:
        done[part] = True
        used[q] += 1
    return found


@njit(f"UniTuple(float64, 2)({SCENE}, int64[::1], int64, float64[:, ::1], int64[:, ::1], boolean[:, ::1], "
      "int64[:, ::1], float64[::1])", cache=True, nogil=True)  # fmt: skip
def forward(  # type: ignore[no-untyped-def]
    begins, queue, slots, out, carry, weights, after, due, order, start, reach, at, done, used, weight,
) -> tuple[float, float]:
    """States before every turn from `start` on; weight picked, and when the last is done. What can't be had waits."""
    for k in range(start, len(order)):
        done[k + 1], used[k + 1], weight[k + 1] = done[k], used[k], weight[k]
        if step(begins, queue, slots, out, carry, weights, after, due, order[k], reach[k], at[k], done[k + 1],
                 used[k + 1], reach[k + 1], at[k + 1]):
            weight[k + 1] += weights[order[k]]
        else:
            at[k + 1] = at[k]
            reach[k + 1, at[k, 0] : at[k, 1]] = reach[k, at[k, 0] : at[k, 1]]
    n = len(order)
    return weight[n], reach[n, at[n, 0] : at[n, 1]].min()


@njit("float64[:, ::1](int64[::1], int64[::1], int64[:, ::1], float64[:, ::1], float64[:, ::1], int64[::1], "
      "int64[::1])", cache=True, nogil=True)  # fmt: skip
def least_to_go(begins, queue, slots, out, carry, order, used) -> FloatArray:  # type: ignore[no-untyped-def]
    """(n+1, r+1) s from each way to stand to the end of the order, before each turn; without a slot parts are skipped.

    Worked out at the last slot filled of each queue, and where the arm is.
    """
    n, start = len(order), out.shape[0] - 1
    filled = np.empty((n + 1, len(slots)), np.int64)
    filled[0] = used
    for k in range(n):
        filled[k + 1] = filled[k]
        q = queue[order[k]]
        if filled[k, q] + 1 < slots.shape[1] and slots[q, filled[k, q] + 1] > slots[q, filled[k, q]]:
            filled[k + 1, q] += 1
    togo = np.full((n + 1, start + 1), np.inf)
    togo[n] = 0.0
    for k in range(n - 1, -1, -1):
        q = queue[order[k]]
        goes = filled[k + 1, q] > filled[k, q]
        for h in range(begins[order[k]], begins[order[k] + 1]):
            rest = np.inf
            if goes:
                for r in range(slots[q, filled[k, q]], slots[q, filled[k + 1, q]]):
                    rest = min(rest, carry[h, r] + togo[k + 1, r])
            for p in range(len(slots)):
                for r in range(slots[p, max(filled[k, p] - 1, 0)], slots[p, filled[k, p]]):
                    togo[k, r] = min(togo[k, r], out[r, h] + rest) if goes else togo[k + 1, r]
            togo[k, start] = min(togo[k, start], out[start, h] + rest) if goes else togo[k + 1, start]
    return togo


@njit(f"int64[::1]({SCENE})", cache=True, nogil=True)
def nearest_next(begins, queue, slots, out, carry, weights, after, due) -> IntArray:  # type: ignore[no-untyped-def]
    """An order (n,): always the part that is set down soonest; what can't be had last."""
    n, rests = len(queue), out.shape[0]
    order, chosen = np.empty(n, np.int64), np.zeros(n, np.bool_)
    done, used, at = np.zeros(n, np.bool_), np.zeros(len(slots), np.int64), np.array([rests - 1, rests])
    reach, ahead, to = np.full(rests, np.inf), np.empty(rests), np.empty(2, np.int64)
    reach[rests - 1] = 0.0
    for k in range(n):
        least, next_part = np.inf, -1
        for part in range(n):
            if not chosen[part] and step(begins, queue, slots, out, carry, weights, after, due, part, reach, at, done,
                                         used, ahead, to):
                done[part] = False
                used[queue[part]] -= 1
                if ahead[to[0] : to[1]].min() < least:
                    least, next_part = ahead[to[0] : to[1]].min(), part
        if next_part < 0:
            order[k:] = np.flatnonzero(~chosen)
            break
        step(begins, queue, slots, out, carry, weights, after, due, next_part, reach, at, done, used, ahead, to)
        reach[to[0] : to[1]] = ahead[to[0] : to[1]]
        at[:] = to
        order[k], chosen[next_part] = next_part, True
    return order


@njit(f"Tuple((float64, float64, int64))({SCENE}, int64[::1], int64, int64, int64)", cache=True, nogil=True)
def improve(  # type: ignore[no-untyped-def]
    begins, queue, slots, out, carry, weights, after, due, order, passes, moved, most,
) -> tuple[float, float, int]:
    """Move parts up to `moved` turns, and swap any two, as long as that gains and no more than about `most` turns have
    been gone through, in order (n,) itself. Weight, finish, turns gone through."""
    n, rests = len(order), out.shape[0]
    reach, at = np.full((n + 1, rests), np.inf), np.zeros((n + 1, 2), np.int64)
    done, used, weight = np.zeros((n + 1, n), np.bool_), np.zeros((n + 1, len(slots)), np.int64), np.zeros(n + 1)
    reach[0, rests - 1], at[0, 0], at[0, 1] = 0.0, rests - 1, rests
    trial, one, other = order.copy(), np.empty(rests), np.empty(rests)
    here, there = np.empty(2, np.int64), np.empty(2, np.int64)
    best = forward(begins, queue, slots, out, carry, weights, after, due, order, 0, reach, at, done, used, weight)
    togo, whole = least_to_go(begins, queue, slots, out, carry, order, used[0]), done[n].all()
    spent = 2 * n
    for _ in range(passes):
        before = best
        for i in range(n):
            if spent >= most:
                break
            for way in range(2):  # 0: swap i and j; 1: move one of the two beyond the other
                for j in range(i + 1, n if way == 0 else min(n, i + moved)):
                    for back in range(1 + way):
                        trial[i : j + 1] = order[i : j + 1]
                        if way == 0:
                            trial[i], trial[j] = order[j], order[i]
                        elif back == 0:
                            trial[i:j], trial[j] = order[i + 1 : j + 1], order[i]
                        else:
                            trial[i + 1 : j + 1], trial[i] = order[i:j], order[j]
                        if whole:  # only what lies between the two turns changes
                            flags, counts = done[i].copy(), used[i].copy()
                            one[:], here[:] = reach[i], at[i]
                            able = True
                            k = i
                            while k <= j:
                                spent += 1
                                if not step(begins, queue, slots, out, carry, weights, after, due, trial[k], one, here,
                                             flags, counts, other, there):
                                    able = False
                                    break
                                one, other = other, one
                                here, there = there, here
                                k += 1
                                if way == 0 and k < j and queue[order[i]] == queue[order[j]]:
                                    late = one[here[0]] - reach[k, here[0]]
                                    if not np.isfinite(late) or np.abs(
                                            one[here[0] : here[1]] - reach[k, here[0] : here[1]] - late).max() > SAME_S:
                                        continue
                                    for m in range(k, j):  # all between the two comes this much later, and no other way
                                        flags[order[m]] = True
                                    counts[:], here[:], k = used[j], at[j], j
                                    one[here[0] : here[1]] = reach[j, here[0] : here[1]] + late
                            if not able:
                                continue
                            value = (one[here[0] : here[1]] + togo[j + 1, here[0] : here[1]]).min()
                            if value >= best[1] - HAIR:
                                continue
                        kept = order[i : j + 1].copy()
                        order[i : j + 1] = trial[i : j + 1]
                        found = forward(begins, queue, slots, out, carry, weights, after, due, order, i, reach, at,
                                        done, used, weight)
                        spent += 2 * (n - i)
                        if found[0] > best[0] + HAIR or (found[0] > best[0] - HAIR and found[1] < best[1] - HAIR):
                            best = found
                            togo, whole = least_to_go(begins, queue, slots, out, carry, order, used[0]), done[n].all()
                        else:
                            order[i : j + 1] = kept
                            forward(begins, queue, slots, out, carry, weights, after, due, order, i, reach, at, done,
                                    used, weight)
        if best == before or spent >= most:
            break
    return best[0], best[1], spent
