"""Picks a minute, weight lost and joint travel under each order, on given streams and on generated ones.

    python tests/bench_orders.py [STREAMS] [--seeds N] [--seconds S]

STREAMS: a folder of recordings with cell.toml, frames.csv and located.csv. Generated streams are a small fast arm and
two kinds of part at random across its lane, each with a place of its own, so many that the arm would have to be busy
0.7, 1.0, 1.4 and 2.0 times over, a pick taking as long as by arrival on a crowded belt. Gains are over the pooled picks
of all seeds; no run falls back to arrival here.
"""

import argparse
from pathlib import Path

import numpy as np
from some_streams import Laid, belt

from pipeline.cell import load_cell
from pipeline.policy import policy_named
from pipeline.replay import Run, Setting, replay
from pipeline.study import Source, see, setting
from pipeline.tables import joint_travel

ORDERS = ("arrival", "nearest", "lookahead")
LOADS = (0.7, 1.0, 1.4, 2.0)
SPEED_MM_S = 200.0
LANE_MM = (200.0, 390.0)
HORIZON = 12
APART_MM = 30.0
JOINTS = {"j1": (600.0, 13e3, 9e5), "j2": (780.0, 18e3, 12e5), "j3": (1300.0, 35e3, 3e6), "j4": (2200.0, 40e3, 2e6)}
CELL = {f"arm__{joint}__{key}": value for joint, values in JOINTS.items()
        for key, value in zip(("max_speed", "max_accel", "max_jerk"), values, strict=True)}  # fmt: skip
CELL |= {
    "belt__window_mm": [-180.0, 180.0],
    "parts": {kind: {"grasp_mm": 3.0, "height_mm": 6.0, "places": [place]}
              for kind, place in (("lever", "left"), ("plate", "right"))},
    "places": [{"name": name, "origin_mm": [40.0, y, -40.0], "columns": 3, "rows": 2, "pitch_mm": [40.0, 40.0],
                "endless": True} for name, y in (("left", 220.0), ("right", -260.0))],
}  # fmt: skip


def crowd(seed: int, every_s: float, seconds: float) -> Setting:
    """A stream of parts that come at random, one every `every_s` on average, none upon another."""
    random, laid, along = np.random.default_rng(seed), list[Laid](), -450.0
    while along > -450.0 - SPEED_MM_S * seconds:
        along -= random.exponential(every_s * SPEED_MM_S)
        for _ in range(20):
            x, kind = random.uniform(*LANE_MM), ("lever", "plate")[random.integers(2)]
            if all(np.hypot(x - one.x_mm, along - one.y_mm) > APART_MM for one in laid[-12:]):
                laid.append(Laid(x, along, random.uniform(-180, 180), kind))
                break
    return belt(laid, seconds + 750 / SPEED_MM_S, SPEED_MM_S, **CELL).setting()


def figures(run: Run) -> tuple[int, float, float]:
    """Picks, minutes, joint travel in degrees."""
    return len(run.picks), (run.end_s - run.start_s) / 60, float(np.degrees(joint_travel(run).sum()))


def row(name: str, settings: list[Setting]) -> None:
    """One line of the table: the settings pooled."""
    pooled = {order: np.sum([figures(replay(one, policy_named(order), order, HORIZON)) for one in settings], axis=0)
              for order in ORDERS}  # fmt: skip
    rates = {order: picks / minutes for order, (picks, minutes, _) in pooled.items()}
    travel = {order: moved / max(picks, 1) for order, (picks, _, moved) in pooled.items()}
    gains = [100 * (pooled["lookahead"][0] / pooled[order][0] - 1) for order in ORDERS[:2]]
    print(f"{name:32.32} {sum(len(one.parts) for one in settings):6d}  " + " ".join(f"{rates[o]:9.2f}" for o in ORDERS)
          + "   " + " ".join(f"{travel[o]:9.0f}" for o in ORDERS) + "   " + " ".join(f"{gain:+8.1f}" for gain in gains))


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("streams", type=Path, nargs="?")
    parser.add_argument("--seeds", type=int, default=4)
    parser.add_argument("--seconds", type=float, default=60.0)
    given = parser.parse_args()
    print(f"{'':39}  {'picks a minute':^29}   {'joint travel a pick, deg':^29}   {'gain in picks, %':^17}")
    head = " ".join(f"{order:>9}" for order in ORDERS)
    print(f"{'stream':32} {'parts':>6}  {head}   {head}    arrival  nearest")
    for folder in sorted(path.parent for path in given.streams.glob("*/located.csv")) if given.streams else []:
        cell = load_cell(folder / "cell.toml")
        row(folder.name, [setting(see(cell, folder, Source(located=folder / "located.csv")))])
    flood = replay(crowd(0, 0.2, given.seconds), policy_named("arrival"), "arrival", HORIZON)
    pick_s = float(np.mean([pick.cycle.release_end_s - pick.cycle.depart_s for pick in flood.picks]))
    for load in LOADS:
        row(f"generated, load {load}", [crowd(seed, pick_s / load, given.seconds) for seed in range(given.seeds)])


if __name__ == "__main__":
    main()
