"""How near the optimum the default call of `best_order` comes on rounds made up in fifteen families, and how fast.

Run: OMP_NUM_THREADS=1 python tests/bench_rounds.py [INSTANCES A FAMILY]
Ten instances of 16 to 60 nodes in each; the optimum by integer programming (some minutes in all). Times are CPU seconds
of one call, floors those of networkx's greedy tour of the same legs.
"""

import sys

import numpy as np
from bench_order import greedy_s, timed
from made_rounds import KINDS, least_round, made

from pipeline.order import best_order

SIZES = (16, 20, 25, 30, 36, 42, 48, 53, 58, 60)


def main(instances):
    """Print a line a family."""
    every = []
    best_order(made("plane", 20, 0), close=True)  # kernels loaded
    print(f"{'family':<16}{'solved':>8}{'gap % mean':>12}{'worst':>8}{'bound % below':>15}{'worst':>8}{'proven':>8}"
          f"{'ms mean':>9}{'worst':>8}{'/greedy':>9}")
    for kind in KINDS:
        rows, solved, proven = [], 0, 0
        for seed in range(instances):
            legs = made(kind, SIZES[seed % len(SIZES)], seed)
            best, seconds = timed(lambda legs=legs: best_order(legs, objective="travel", close=True))
            optimum = least_round(legs)
            solved, proven, least = solved + (optimum is not None), proven + best.proven, optimum or best.value
            assert best.bound <= least + 1e-6 <= best.value + 2e-6
            rows.append((100 * (best.value / least - 1) if least else 0.0, 100 * (1 - best.bound / least) if least else
                         0.0, 1e3 * seconds, seconds / greedy_s(legs)))
        gap, below, ms, ratio = np.array(rows).T
        every += rows
        print(f"{kind:<16}{solved:>8}{gap.mean():>12.3f}{gap.max():>8.3f}{below.mean():>15.2f}{below.max():>8.2f}"
              f"{proven:>8}{ms.mean():>9.0f}{ms.max():>8.0f}{ratio.mean():>9.1f}", flush=True)
    gap, below, ms, _ = np.array(every).T
    print(f"all: gap mean {gap.mean():.4f} % worst {gap.max():.3f} %, bound mean {below.mean():.2f} % below, worst "
          f"{ms.max():.0f} ms")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else len(SIZES))
