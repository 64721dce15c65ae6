"""How fast the arm's kinematics and move times are, and how exact over a million poses.

Run: OMP_NUM_THREADS=1 python tests/bench_arm.py [--exact]
Times are the best of several runs, given as ratios to a floor measured in the same run: for `inverse` two arctan2, one
arccos and one sine and cosine of the same batch by NumPy; for `move_time` one bare ruckig calculation a move.
"""

import sys
import time
from collections.abc import Callable

import numpy as np
import ruckig
from some_arms import changed, random_arm, random_joints

from pipeline.arm import Arm
from pipeline.move_time import move_time, rest_to_moving_time

POSES, MOVES, RUNS = 200_000, 20_000, 7


def best_s(work: Callable[[], object]) -> float:
    """Shortest of several runs."""
    taken = []
    for _ in range(RUNS):
        start = time.perf_counter()
        work()
        taken.append(time.perf_counter() - start)
    return min(taken)


def bench_inverse(name: str, arm: Arm) -> None:
    joints = random_joints(0, POSES)
    tips = arm.forward(joints)
    x, y, yaw = (np.ascontiguousarray(tips[:, k]) for k in (0, 1, 3))
    cosine = np.cos(joints[:, 1])
    floor = best_s(lambda: (np.arctan2(y, x), np.arctan2(x, y), np.arccos(cosine), np.sin(yaw), np.cos(yaw)))
    taken = best_s(lambda: arm.inverse(tips))
    print(f"inverse, {name}: {POSES / taken / 1e6:.1f} M poses/s, {taken / floor:.2f} of the floor "
          f"({floor / POSES * 1e9:.0f} ns a pose)")


def bench_move_time() -> None:
    arm = random_arm(0)
    rng = np.random.default_rng(0)
    start, end = rng.uniform(arm.limits.lower, arm.limits.upper, (2, MOVES, 4))
    scale = np.array([1, 1, 1e-3, 1])
    planner, trajectory, ask = ruckig.Ruckig(4), ruckig.Trajectory(4), ruckig.InputParameter(4)
    ask.max_velocity, ask.max_acceleration, ask.max_jerk = (
        (limit * scale).tolist() for limit in (arm.limits.speed, arm.limits.accel, arm.limits.jerk))
    pairs = list(zip((start * scale).tolist(), (end * scale).tolist(), strict=True))

    def bare() -> None:
        for a, b in pairs:
            ask.current_position, ask.target_position = a, b
            planner.calculate(ask, trajectory)

    floor = best_s(bare)
    taken = best_s(lambda: move_time(arm, start, end))
    print(f"move_time: {MOVES / taken / 1e6:.2f} M moves/s, {taken / floor:.3f} of bare ruckig "
          f"({floor / MOVES * 1e6:.2f} us a move)")
    way, speed = end - start, rng.uniform(-0.3, 0.3, (MOVES, 4)) * arm.limits.speed
    limits = arm.limits.speed, arm.limits.accel, arm.limits.jerk
    taken = best_s(lambda: rest_to_moving_time(way, speed, *limits))
    print(f"rest_to_moving_time: {4 * MOVES / taken / 1e6:.2f} M axes/s")


def exact_over_a_million() -> None:
    """1,000 arms x 1,000 poses: forward against pinocchio, inverse against the joints that gave the tips."""
    from pinocchio_arm import pinocchio_tips

    worst = np.zeros(4)
    for seed in range(1000):
        arm, joints = random_arm(seed), random_joints(seed, 1000)
        points, yaws = pinocchio_tips(arm, joints)
        tips = arm.forward(joints)
        both = arm.inverse(tips)
        other = arm.inverse(arm.forward(both))
        off = both[np.arange(1000), arm.elbow_of(joints)] - joints
        again = np.concatenate([off, (other[:, [0, 1], [0, 1]] - both).reshape(-1, 4)])
        again[:, [0, 1, 3]] = _turned(again[:, [0, 1, 3]])
        worst = np.maximum(worst, [np.abs(tips[:, :3] - points).max(), _turned(tips[:, 3] - yaws).max(),
                                   again[:, [0, 1, 3]].max(), np.abs(again[:, 2]).max()])
    print("1,000 arms x 1,000 poses: forward off pinocchio by {:.1e} mm, {:.1e} rad; inverse(forward), both elbows, by "
          "{:.1e} rad, {:.1e} mm".format(*worst))


def _turned(angle: np.ndarray) -> np.ndarray:
    return np.abs((angle + np.pi) % (2 * np.pi) - np.pi)


if __name__ == "__main__":
    for name, cell in (("tool on the quill axis", changed()), ("tool aside", changed(tool__offset_mm=[30.0, 10.0]))):
        bench_inverse(name, Arm(cell.arm, cell.tool))
    bench_move_time()
    if "--exact" in sys.argv:
        exact_over_a_million()
