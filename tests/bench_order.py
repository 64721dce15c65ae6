"""How good orders are, how near their bounds, and how long they take.

Run: OMP_NUM_THREADS=1 python tests/bench_order.py [FOLDER]
FOLDER (default: the data kept beside the checkout) holds optima.csv with tsplib/, best_known.csv with tsptw/. Times are
CPU seconds of one call with default settings, and their ratio to networkx's greedy tour of the same legs.
"""

import sys
import time
from pathlib import Path

import networkx as nx
import numpy as np
from made_windows import KINDS as WINDOW_KINDS
from made_windows import made_windows
from published_orders import read_best_known, read_optima, read_tsplib, read_windowed

from pipeline.order import best_order
from pipeline.order.lookahead import best_pick_sequence


def timed(work):
    """The result and the CPU seconds it took."""
    start = time.process_time()
    result = work()
    return result, time.process_time() - start


def greedy_s(legs):
    """CPU seconds of the floor."""
    graph = nx.from_numpy_array(legs + 1.0, create_using=nx.DiGraph)
    return timed(lambda: nx.approximation.greedy_tsp(graph, source=0))[1]


def bench_rounds(folder):
    """TSPLIB: closed rounds without windows."""
    gaps, bounds, seconds = [], [], []
    print(f"{'round':<16}{'optimum':>10}{'value':>10}{'bound':>10}{'gap %':>8}{'bound %':>8}{'ms':>8}{'/greedy':>9}")
    for name, optimum in read_optima(folder).items():
        legs = read_tsplib(folder / "tsplib" / name)
        best, taken = timed(lambda legs=legs: best_order(legs, objective="travel", close=True))
        gaps.append(100 * (best.value / optimum - 1))
        bounds.append(100 * (1 - best.bound / optimum))
        seconds.append(taken)
        print(f"{name:<16}{optimum:>10.0f}{best.value:>10.0f}{best.bound:>10.0f}{gaps[-1]:>8.3f}{bounds[-1]:>8.2f}"
              f"{1e3 * taken:>8.1f}{taken / greedy_s(legs):>9.1f}{'  proven' if best.proven else ''}")
    print(f"gap mean {np.mean(gaps):.3f} % worst {max(gaps):.3f} %, bound mean {np.mean(bounds):.2f} % below, "
          f"worst {1e3 * max(seconds):.0f} ms\n")


def bench_windows(folder, objective, column):
    """Instances with windows, by family."""
    rows = read_best_known(folder)
    print(f"{objective:<22}{'files':>6}{'proven':>8}{'dropping':>10}{'gap % mean':>12}{'worst':>8}"
          f"{'ms mean':>9}{'worst':>8}")
    for family in dict.fromkeys(row["family"] for row in rows):
        gaps, seconds, proven, dropping = [], [], 0, 0
        for row in rows:
            if row["family"] == family:
                legs, windows = read_windowed(folder / "tsptw" / row["file"])
                best, taken = timed(lambda legs=legs, windows=windows: best_order(
                    legs, windows[1:], objective=objective, close=True))
                gaps.append(100 * (best.value / float(row[column]) - 1))
                seconds.append(1e3 * taken)
                proven, dropping = proven + best.proven, dropping + bool(best.dropped)
        print(f"{family:<22}{len(gaps):>6}{proven:>8}{dropping:>10}{np.mean(gaps):>12.3f}{max(gaps):>8.3f}"
              f"{np.mean(seconds):>9.1f}{max(seconds):>8.1f}")
    print()


def bench_made_windows():
    """Earliest finish under wide windows: gap to the own bound, and how far a longer search with other seeds gets."""
    print(f"{'made windows':<16}{'':>5}{'proven':>8}{'dropping':>10}{'own gap %':>11}{'worst':>8}{'beaten by %':>13}"
          f"{'s mean':>8}{'worst':>8}")
    for kind in WINDOW_KINDS:
        rows, proven, dropping = [], 0, 0
        for count in (20, 28, 36, 44):
            for instance in range(3):
                task = made_windows(kind, count, instance)
                best, taken = timed(lambda task=task: best_order(*task, close=True))
                others = [] if best.proven else [best_order(*task, close=True, seed=seed).value for seed in (1, 2)]
                proven, dropping = proven + best.proven, dropping + bool(best.dropped)
                rows.append((100 * best.gap, 100 * (best.value / min([best.value, *others]) - 1), taken))
        gap, beaten, seconds = np.array(rows).T
        print(f"{kind:<16}{len(rows):>5}{proven:>8}{dropping:>10}{gap.mean():>11.2f}{gap.max():>8.2f}{beaten.max():>13.3f}"
              f"{seconds.mean():>8.2f}{seconds.max():>8.2f}", flush=True)
    print()


def made_rounds(kind, count, seed):
    """Legs whose best round is not known: points in a square, in heaps, a crane's empty runs, one-way streets."""
    random = np.random.default_rng(seed)
    here, there = random.integers(0, 1000, (2, count, 2))
    if kind == "heaps":
        here = here[random.integers(0, 6, count)] + random.normal(0, 40, (count, 2))
    if kind == "crane":
        return np.abs(here[:, None] - there[None]).max(axis=-1).astype(float)
    if kind == "streets":
        legs = np.where(random.random((count, count)) < 0.85, 1e4, random.integers(1, 400, (count, count)))
        for k in range(count):
            legs = np.minimum(legs, legs[:, k, None] + legs[None, k])
        return legs
    return np.round(np.hypot(*(here[:, None] - here[None]).transpose(2, 0, 1)))


def bench_made_rounds():
    """Gap to the own bound, which is all that is known, and how far three seeds disagree."""
    print(f"{'made':<10}{'N':>5}{'own gap %':>11}{'seeds apart %':>15}{'ms worst':>10}")
    for kind in ("square", "heaps", "crane", "streets"):
        for count in (48, 60, 200):
            gaps, apart, seconds = [], [], []
            for instance in range(3):
                legs = made_rounds(kind, count, instance)
                found = [timed(lambda legs=legs, seed=seed: best_order(legs, close=True, seed=seed))
                         for seed in range(3)]
                values = [best.value for best, _ in found]
                gaps.append(100 * min(best.gap for best, _ in found))
                apart.append(100 * (max(values) / min(values) - 1))
                seconds += [taken for _, taken in found]
            print(f"{kind:<10}{count:>5}{np.mean(gaps):>11.2f}{max(apart):>15.3f}{1e3 * max(seconds):>10.0f}")
    print()


def bench_lookahead():
    """Sequences of grasps of moving parts, against one pass of NumPy over the table of legs."""
    print(f"{'look-ahead':<14}{'states':>9}{'ms median':>11}{'worst':>8}{'/table':>8}")
    for parts, grasps in ((8, 4), (12, 2), (12, 4), (14, 4)):
        taken, floor, states = [], [], 0
        for seed in range(9):
            random = np.random.default_rng(seed)
            count, clock = parts * grasps, 0.05 * np.arange(200)
            part_of = np.repeat(np.arange(parts), grasps)
            ready, gone = random.uniform(0, 6, parts)[part_of], random.uniform(5, 10, parts)[part_of]
            finish = np.maximum(clock, ready[:, None]) + random.uniform(0.4, 0.9, (count + 1, count, 1))
            finish[finish > np.broadcast_to(gone[:, None], finish.shape)] = np.inf
            nothing = np.zeros(parts, np.int64)
            best, one = timed(lambda f=finish, p=part_of, b=nothing: best_pick_sequence(
                f, p, np.ones(len(b)), b, 0.0, 0.0, 0.05))
            states, taken = max(states, best.states), [*taken, 1e3 * one]
            floor.append(1e3 * timed(lambda f=finish: np.minimum.accumulate(f[:, :, ::-1], axis=2))[1])
        print(f"{parts:>3} x {grasps:<8}{states:>9}{np.median(taken):>11.2f}{max(taken):>8.2f}"
              f"{np.median(taken) / np.median(floor):>8.1f}")


if __name__ == "__main__":
    kept = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parents[2] / "shared/reference/ordering"
    best_order(made_rounds("square", 20, 0), np.tile([0.0, 1e4], (19, 1)))  # kernels loaded
    if kept.is_dir():
        bench_rounds(kept)
        bench_windows(kept, "finish", "best_makespan")
        bench_windows(kept, "travel", "best_travel")
    bench_made_windows()
    bench_made_rounds()
    bench_lookahead()
