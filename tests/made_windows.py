"""Tasks with wide windows made up in the kinds that published ones come in (their kinds, not their data)."""

import numpy as np

from pipeline.order import best_order

DAY, SERVICE = 960.0, 10.0
KINDS = {  # share of items without a window; narrowest and widest of the others
    "narrow": (0.0, 120, 120), "a quarter open": (0.25, 120, 120), "half open": (0.5, 120, 120),
    "most open": (0.75, 120, 120), "mixed": (0.0, 60, 300), "twice as wide": (0.0, 240, 240),
    "mixed wide": (0.0, 150, 500), "half a day": (0.0, 450, 650),
}  # fmt: skip


def made_windows(kind, count, seed):
    """Legs (n+1, n+1), windows (n, 2) and service (n,): items in heaps and between them, and an order that keeps all
    windows, about which they are laid."""
    open_share, least, most = KINDS[kind]
    random = np.random.default_rng([list(KINDS).index(kind), count, seed])
    heap = random.uniform(10, 90, (5, 2))[random.integers(0, 5, count)] + random.normal(0, 5, (count, 2))
    apart = random.uniform(0, 100, (count, 2))
    at = np.vstack([[40, 50], np.where(random.random((count, 1)) < 0.5, heap, apart)]).round()
    legs = np.floor(1e4 * np.hypot(*(at[:, None] - at).transpose(2, 0, 1))) / 1e4
    order = _spoiled(legs, [item + 1 for item in best_order(legs, objective="travel", close=True).order], random)
    spare = max(DAY - _lasts(legs, order), 0.0) / count
    windows, time, place = np.zeros((count, 2)), 0.0, 0
    for item in order:
        time += legs[place, item] + random.choice([0.0, random.uniform(0, 2 * spare)])
        width = random.uniform(least, most)
        early = round(max(time - random.uniform(0, width), 0.0))
        windows[item - 1] = early, max(early + width, np.ceil(time))
        if random.random() < open_share:
            windows[item - 1] = 0.0, max(DAY - SERVICE - legs[item, 0], np.ceil(time))
        time, place = max(time, windows[item - 1, 0]) + SERVICE, item
    return legs, windows, np.full(count, SERVICE)


def _spoiled(legs, order, random):
    """A short order made longer by turning stretches of it round, as far as the day lasts."""
    lasts = random.uniform(0.8, 0.99) * DAY
    for _ in range(60):
        i, j = np.sort(random.integers(0, len(order), 2))
        other = order[:i] + order[i:j + 1][::-1] + order[j + 1:]
        order = other if _lasts(legs, other) <= lasts else order
    return order


def _lasts(legs, order):
    return sum(legs[a, b] for a, b in zip([0, *order], [*order, 0], strict=True)) + SERVICE * len(order)
