"""A run held to its definition: what `replay` wrote, checked from the files alone.

Nothing here is shared with what planned the run. Kinematics, belt and limits are worked out anew from the cell file.
`faults(recording, out)` names everything that does not hold. The only slack: 2 % of a limit, the rounding of the file,
and what the belt may do between frames (a monotone cubic through the counts against straight lines).
"""

import csv
import tomllib
from collections import Counter
from collections.abc import Iterator
from functools import cached_property
from pathlib import Path

import numpy as np
from scipy.interpolate import PchipInterpolator

FOLLOWED_MM, FOLLOWED_DEG, STRAIGHT_MM, CLEAR_MM, COLUMN_MM = 0.2, 0.2, 0.5, 0.5, 5.0
ROUNDED = np.array([0.5e-6, 0.5e-6, 0.5e-6, 0.5e-6])  # of the joints in the file; its times are whole samples
SLACK, WINDOW_MM, TIME_S = 1.02, 0.05, 2e-6
REASONS = {"out_of_reach", "joint_limit", "keepout", "no_room", "wrong_side", "unknown", "low_score", "too_late",
           "place_full"}  # fmt: skip


def read(path: Path) -> list[dict[str, str]]:
    with open(path, newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def columns(rows: list[dict[str, str]], *names: str) -> np.ndarray:
    return np.array([[float(row[name]) for name in names] for row in rows]).reshape(-1, len(names))


def apart_deg(a: np.ndarray, b: np.ndarray | float, symmetry: int = 1) -> np.ndarray:
    """Difference of yaws modulo a symmetry, deg."""
    turn = 360.0 / symmetry
    return np.abs((a - b + turn / 2) % turn - turn / 2)


class Files:
    """A recording and what was written about it. Degrees and millimetres, as in the files."""

    def __init__(self, recording: Path, out: Path, cell: Path | None = None) -> None:
        self.cell = tomllib.loads((cell or recording / "cell.toml").read_text())
        self.frames, self.parts, self.picks = (read(recording / "frames.csv"), read(out / "parts.csv"),
                                               read(out / "picks.csv"))
        self.truth = read(recording / "truth.csv") if (recording / "truth.csv").exists() else []
        self.seen_file = recording / "located.csv"
        path = np.loadtxt(out / "trajectory.csv", delimiter=",", skiprows=1, ndmin=2).reshape(-1, 5)
        self.t, self.q = path[:, 0], path[:, 1:]
        self.part_of = {row["part_no"]: row for row in self.parts}

    @cached_property
    def joints(self) -> list[dict[str, float]]:
        return [self.cell["arm"][f"j{n}"] for n in (1, 2, 3, 4)]

    @cached_property
    def counts(self) -> np.ndarray:
        counts = columns(self.frames, "counts")[:, 0]
        modulus = self.cell.get("belt", {}).get("counts_modulus")
        if modulus:
            counts[1:] = counts[0] + np.cumsum((np.diff(counts) + modulus / 2) % modulus - modulus / 2)
        return counts

    @cached_property
    def times(self) -> np.ndarray:
        return columns(self.frames, "time_s")[:, 0]

    @cached_property
    def heading(self) -> np.ndarray:
        angle = np.radians(self.cell.get("belt", {}).get("heading_deg", 0.0))
        return np.array([np.cos(angle), np.sin(angle)])

    def travel(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Travel of the belt, straight between frames, and how far it may be from that; mm."""
        per_count = self.cell.get("belt", {}).get("mm_per_count", 0.0)
        first, last = (np.diff(self.counts[k:][:2]) / np.diff(self.times[k:][:2]) for k in (0, -2))
        ends = np.array([self.times[0] - 100, *self.times, self.times[-1] + 100])
        at = np.concatenate([self.counts[0] - 100 * first, self.counts, self.counts[-1] + 100 * last])
        fine = np.linspace(self.times[:-1], self.times[1:], 9).T
        smooth = PchipInterpolator(self.times, self.counts)(fine)
        apart = np.abs(smooth - np.interp(fine, self.times, self.counts)).max(axis=1)
        apart = np.concatenate([[0.0], apart, [0.0]])
        near = np.maximum(np.maximum(apart[:-2], apart[1:-1]), apart[2:])
        k = np.clip(np.searchsorted(self.times, t) - 1, 0, len(near) - 1)
        return np.interp(t, ends, at) * per_count, (near[k] + 1) * abs(per_count)

    def forward(self, q: np.ndarray) -> np.ndarray:
        """Tool tips (n, 4) x, y, z, yaw for joints (n, 4)."""
        arm, tool = self.cell["arm"], self.cell["tool"]
        default = ("counterclockwise", "counterclockwise", "down", "clockwise")
        sign = [1 if joint.get("positive", usual) in ("counterclockwise", "up") else -1
                for joint, usual in zip(self.joints, default, strict=True)]
        turned = np.radians(q * sign)
        a = np.radians(arm.get("base_yaw_deg", 0.0)) + turned[:, 0]
        b = a + turned[:, 1]
        c = b + turned[:, 3]
        base, (ox, oy) = arm.get("base_mm", [0, 0, 0]), tool.get("offset_mm", [0, 0])
        x = base[0] + arm["link1_mm"] * np.cos(a) + arm["link2_mm"] * np.cos(b) + ox * np.cos(c) - oy * np.sin(c)
        y = base[1] + arm["link1_mm"] * np.sin(a) + arm["link2_mm"] * np.sin(b) + ox * np.sin(c) + oy * np.cos(c)
        z = (base[2] + arm["flange_height_mm"] + sign[2] * q[:, 2] - tool.get("length_mm", 0.0)
             + arm.get("quill_lead_mm_per_rev", 0.0) * sign[3] * q[:, 3] / 360)
        return np.stack([x, y, z, np.degrees(c) + tool.get("yaw_deg", 0.0)], axis=1)

    def between(self, first: float, last: float) -> np.ndarray:
        return np.flatnonzero((self.t >= first - TIME_S) & (self.t <= last + TIME_S))


def faults(recording: Path, out: Path, cell: Path | None = None) -> list[str]:
    """Everything in a run that does not hold, one line each."""
    files = Files(recording, out, cell)
    checks = (limits, start, fates, times, poses, windows, slots, followed, heights, bends)
    return [line for check in checks for line in check(files)]


def limits(files: Files) -> Iterator[str]:
    """Speed, acceleration and jerk by divided differences over 1 to 8 samples; positions inside the limits."""
    if len(files.t) < 2:
        return
    step = float(np.median(np.diff(files.t)))
    if not np.allclose(np.diff(files.t), step, atol=TIME_S):
        yield "trajectory: not evenly sampled"
    for order, key in ((1, "max_speed"), (2, "max_accel"), (3, "max_jerk")):
        for n in range(1, 9):
            difference = files.q
            for _ in range(order):
                difference = (difference[n:] - difference[:-n]) / (n * step)
            rounding = 2**order * ROUNDED / (n * step) ** order
            for j, joint in enumerate(files.joints):
                if key in joint and len(difference):
                    worst = int(np.abs(difference[:, j]).argmax())
                    if abs(difference[worst, j]) > SLACK * joint[key] + rounding[j]:
                        yield (f"J{j + 1} {key} {abs(difference[worst, j]):.0f} over {joint[key]:.0f} near "
                               f"{files.t[worst]:.3f} s ({n} samples)")
    motion = files.cell["motion"]
    for j, joint in enumerate(files.joints):
        margin = motion.get("limit_margin_mm" if j == 2 else "limit_margin_deg", 1.0)
        home = files.cell["arm"]["home"][j]
        low, high = min(joint["min"] + margin, home), max(joint["max"] - margin, home)
        if files.q[:, j].min() < low - 1e-4 or files.q[:, j].max() > high + 1e-4:
            yield f"J{j + 1} goes from {files.q[:, j].min():.2f} to {files.q[:, j].max():.2f}, allowed {low} to {high}"


def start(files: Files) -> Iterator[str]:
    """The run starts at home, and a sample follows another every 4 ms."""
    if len(files.t) and np.abs(files.q[0] - files.cell["arm"]["home"]).max() > 1e-3:
        yield f"starts at {files.q[0]}, not at home"
    if len(files.t) > 1 and abs(np.diff(files.t).max() - 0.004) > TIME_S:
        yield "trajectory: not every 4 ms"


def fates(files: Files) -> Iterator[str]:
    """Every part has one row and one fate, and the picks agree; no part lies twice in one place."""
    for number, rows in Counter(row["part_no"] for row in files.parts).items():
        if rows > 1:
            yield f"part {number} stands {rows} times"
    picked = Counter(pick["part_no"] for pick in files.picks)
    for row in files.parts:
        often, fate = picked[row["part_no"]], row["fate"]
        if often > 1 or fate != ("missed", "picked")[often] or (row["reason"] in REASONS) != (fate == "missed"):
            yield f"part {row['part_no']}: {fate} {row['reason']!r}, picked {often} times"
        if row["side"] == "down" and row["fate"] == "picked":
            yield f"part {row['part_no']} was picked from its wrong side"
    if set(picked) - set(files.part_of):
        yield f"picks of parts that are not listed: {set(picked) - set(files.part_of)}"


def times(files: Files) -> Iterator[str]:
    """Nothing is decided before its part is known, and picks do not overlap."""
    latency = (files.cell.get("cameras") or [{}])[0].get("latency_s", 0.0)
    at = {row["frame"]: float(row["time_s"]) for row in files.frames}
    names = ("decided_s", "grasp_start_s", "grasp_end_s", "release_start_s", "release_end_s")
    before = -np.inf
    for pick in files.picks:
        one = [float(pick[name]) for name in names]
        if (np.diff(one) < 0).any() or one[1] < before:
            yield f"pick {pick['pick']}: times out of order or over the pick before"
        if one[0] < at[files.part_of[pick["part_no"]]["first_frame"]] + latency - TIME_S:
            yield f"pick {pick['pick']}: decided before the part was known"
        dwells = one[2] - one[1], one[4] - one[3]
        if np.abs(np.subtract(dwells, [files.cell["motion"].get("grasp_s", 0.06),
                                       files.cell["motion"].get("release_s", 0.05)])).max() > 2 * TIME_S:
            yield f"pick {pick['pick']}: dwells {dwells}"
        before = one[4]


def poses(files: Files) -> Iterator[str]:
    """Joints and poses of picks.csv agree, the elbow is as it says, and the truth is where the tool went."""
    for side, elbow in (("", True), ("place_", False)):
        q = columns(files.picks, *(f"{side}{j}" for j in ("j1_deg", "j2_deg", "j3_mm", "j4_deg")))
        told = columns(files.picks, *(f"{side}{c}" for c in ("x_mm", "y_mm", "z_mm", "yaw_deg")))
        made = files.forward(q)
        wrong = (np.abs(made - told)[:, :3] > 1e-3).any(axis=1) | (apart_deg(made[:, 3], told[:, 3]) > 1e-3)
        yield from (f"pick {k + 1}: {side}joints and pose disagree" for k in np.flatnonzero(wrong))
        if elbow:
            turned = files.joints[1].get("positive", "counterclockwise") == "counterclockwise"
            for pick, bend in zip(files.picks, q[:, 1], strict=True):
                if pick["elbow"] != ("right" if (bend > 0) == turned else "left"):
                    yield f"pick {pick['pick']}: elbow {pick['elbow']} with J2 at {bend:.1f}"
    if not files.truth or "belt" not in files.cell:
        return
    true = columns(files.truth, "x_mm", "y_mm")
    for pick in files.picks:
        travel, unsure = files.travel(np.array([float(pick["grasp_start_s"])]))
        at = np.array([float(pick["x_mm"]), float(pick["y_mm"])]) - travel * files.heading
        near = np.hypot(*(true - at).T)
        row = files.truth[int(near.argmin())]
        if near.min() > 3.0 + unsure[0] or row["part"] != pick["part"] or row["side"] != "up":
            yield f"pick {pick['pick']}: a {row['part']} lying {row['side']} is {near.min():.1f} mm away"


def windows(files: Files) -> Iterator[str]:
    """From grasp start to grasp end the part is inside the window; the grip is at its height."""
    belt, surface = files.cell.get("belt"), files.cell.get("belt", files.cell.get("tray", {})).get("surface_mm", 0.0)
    for pick in files.picks:
        part = files.cell["parts"][pick["part"]]
        if abs(float(pick["z_mm"]) - surface - part["grasp_mm"]) > 1e-3 and not part.get("grips"):
            yield f"pick {pick['pick']}: gripped at height {pick['z_mm']}"
        if belt is None or "window_mm" not in belt:
            continue
        t = np.array([float(pick["grasp_start_s"]), float(pick["grasp_end_s"])])
        travel, unsure = files.travel(t)
        along = np.array([float(pick["x_mm"]), float(pick["y_mm"])]) @ files.heading + travel - travel[0]
        first, last = belt["window_mm"]
        if (along < first - unsure - WINDOW_MM).any() or (along > last + unsure + WINDOW_MM).any():
            yield f"pick {pick['pick']}: gripped from {along[0]:.2f} to {along[1]:.2f}, window {first} to {last}"


def slots(files: Files) -> Iterator[str]:
    """A part goes to one of its places, to a slot of the grid, once in a filling, in its order."""
    taken: Counter[str] = Counter()
    for pick in files.picks:
        place = next(p for p in files.cell["places"] if p["name"] == pick["place"])
        part = files.cell["parts"][pick["part"]]
        rows, cols = place.get("rows", 1), place.get("columns", 1)
        k, number = taken[pick["place"]], int(pick["slot"]) - 1
        taken[pick["place"]] += 1
        if pick["place"] not in part["places"] or (k >= rows * cols and not place.get("endless", False)):
            yield f"pick {pick['pick']}: {pick['place']} is no place for it, or full"
        if number != k % (rows * cols):
            yield f"pick {pick['pick']}: slot {number + 1}, not {k % (rows * cols) + 1}"
        yaw = np.radians(place.get("yaw_deg", 0.0))
        row, column = divmod(number, cols)
        pitch = place.get("pitch_mm", [0.0, 0.0])
        along, across = column * pitch[0], row * pitch[1]
        origin = place["origin_mm"]
        slot = (origin[0] + along * np.cos(yaw) - across * np.sin(yaw),
                origin[1] + along * np.sin(yaw) + across * np.cos(yaw), origin[2])
        at = [float(pick[f"place_{c}_mm"]) for c in "xyz"]
        if np.abs(np.subtract(at, slot)).max() > 1e-3 and not part.get("grips"):
            yield f"pick {pick['pick']}: set down at {at}, slot at {slot}"
        symmetry = part.get("symmetry", 1)
        turned = np.array([float(pick["place_yaw_deg"])])
        asked = place.get("yaw_deg", 0.0) + place.get("slot_yaw_deg", 0.0)
        free = place.get("any_yaw", False) or symmetry == "round" or part.get("grips")
        if not free and apart_deg(turned, asked, int(symmetry))[0] > 1e-3:
            yield f"pick {pick['pick']}: set down at yaw {turned[0]:.2f}, asked for {asked}"


def followed(files: Files) -> Iterator[str]:
    """The tool stays on the part through its dwell, and at the slot through its own."""
    for pick in files.picks:
        at = np.array([float(pick[c]) for c in ("x_mm", "y_mm", "z_mm", "yaw_deg")])
        k = files.between(float(pick["grasp_start_s"]), float(pick["grasp_end_s"]))
        tips = files.forward(files.q[k])
        travel, unsure = files.travel(files.t[k])
        begun, _ = files.travel(np.array([float(pick["grasp_start_s"])]))
        away = np.hypot(*(tips[:, :2] - at[:2] - (travel - begun)[:, None] * files.heading).T) - 2 * unsure
        if not len(k) or away.max() > FOLLOWED_MM or np.abs(tips[:, 2] - at[2]).max() > FOLLOWED_MM \
                or apart_deg(tips[:, 3], at[3]).max() > FOLLOWED_DEG:
            yield f"pick {pick['pick']}: off the part by {away.max(initial=0):.2f} mm"
        slot = np.array([float(pick[f"place_{c}"]) for c in ("x_mm", "y_mm", "z_mm", "yaw_deg")])
        tips = files.forward(files.q[files.between(float(pick["release_start_s"]), float(pick["release_end_s"]))])
        off = np.abs(tips - slot)
        if not len(tips) or off[:, :3].max() > FOLLOWED_MM or apart_deg(tips[:, 3], slot[3]).max() > FOLLOWED_DEG:
            yield f"pick {pick['pick']}: off the slot while it lets go"


def heights(files: Files) -> Iterator[str]:
    """Below the clear height the tip stays in a column; the last approach_mm down are straight."""
    motion = files.cell["motion"]
    clear = motion.get("clear_mm", motion["travel_mm"])
    tips = files.forward(files.q)
    low = tips[:, 2] < clear - CLEAR_MM
    travel, unsure = files.travel(files.t)
    before = files.forward(np.array([files.cell["arm"]["home"]], float))[0, :2]
    ends = [float(pick["release_end_s"]) for pick in files.picks]
    for n, pick in enumerate(files.picks):
        at = np.array([float(pick["x_mm"]), float(pick["y_mm"])])
        slot = np.array([float(pick["place_x_mm"]), float(pick["place_y_mm"])])
        begun, _ = files.travel(np.array([float(pick["grasp_start_s"])]))
        away = np.hypot(*(tips[:, :2] - at - (travel - begun)[:, None] * files.heading).T)
        from_s, to_s = (ends[n - 1] if n else files.t[0]), ends[n]
        trip = files.between(from_s, to_s)
        lane = (tips[:, :2] - at) @ files.heading
        aside = np.abs((tips[:, :2] - at) @ np.array([-files.heading[1], files.heading[0]]))
        along_lane = (aside < COLUMN_MM) & ((lane > -COLUMN_MM) & (lane < travel - begun + COLUMN_MM)
                                            | (lane < COLUMN_MM) & (lane > travel - begun - COLUMN_MM))
        near = np.minimum(np.hypot(*(tips[:, :2] - slot).T), np.hypot(*(tips[:, :2] - before).T))
        wrong = trip[low[trip] & (near[trip] > COLUMN_MM) & (away[trip] > COLUMN_MM) & ~along_lane[trip]]
        if len(wrong):
            yield f"pick {pick['pick']}: below the clear height between its columns at {files.t[wrong[0]]:.3f} s"
        down = min(motion.get("approach_mm", 10.0), clear - float(pick["z_mm"]))
        k = trip[(files.t[trip] <= float(pick["grasp_start_s"])) & (files.t[trip] > float(pick["grasp_start_s"]) - 1)]
        k = k[_last_below(tips[k, 2], float(pick["z_mm"]) + down)]
        if len(k) and (away[k] - 2 * unsure[k]).max() > STRAIGHT_MM:
            yield f"pick {pick['pick']}: comes down {(away[k] - unsure[k]).max():.2f} mm aside of the part"
        down = min(motion.get("approach_mm", 10.0), clear - float(pick["place_z_mm"]))
        k = trip[files.t[trip] <= float(pick["release_start_s"])]
        k = k[_last_below(tips[k, 2], float(pick["place_z_mm"]) + down)]
        if len(k) and np.hypot(*(tips[k, :2] - slot).T).max() > STRAIGHT_MM:
            yield f"pick {pick['pick']}: comes down aside of its slot"
        before = slot


def _last_below(z: np.ndarray, height: float) -> np.ndarray:
    """Indices of the samples at the end that lie below a height."""
    above = np.flatnonzero(z > height)
    return np.arange(above[-1] + 1 if len(above) else 0, len(z))


def bends(files: Files) -> Iterator[str]:
    """At part and slot the arm is neither stretched nor folded."""
    least = files.cell["motion"].get("singularity_deg", 8.0) - 1e-3
    for pick in files.picks:
        for first, last in (("grasp_start_s", "grasp_end_s"), ("release_start_s", "release_end_s")):
            bend = np.abs(files.q[files.between(float(pick[first]), float(pick[last])), 1])
            if len(bend) and (bend.min() < least or bend.max() > 180 - least):
                yield f"pick {pick['pick']}: J2 at {bend.min():.1f} near {first}"
