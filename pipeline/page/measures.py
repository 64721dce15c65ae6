"""How the run went in numbers: its pace, how a cycle splits, how hard the joints work, how good the choices were."""

import numpy as np

from pipeline.account.choices import EQUAL, choices_of
from pipeline.account.loads import JOINTS, Loads, loads_of
from pipeline.account.pace import pace_of
from pipeline.account.phases import SPLIT, split_of
from pipeline.page.charts import Frame, chart, key, stacked
from pipeline.page.listings import plain_table
from pipeline.page.markup import Markup, joined, tag
from pipeline.page.subject import Subject

STYLE = {"up": "up", "across to the part": "across", "down": "down", "dwell": "dwell", "up with the part": "up",
         "across to the place": "across", "down to the slot": "down", "release": "release"}  # fmt: skip

BOUND = "The bound counts the weight of what is in view. It says nothing of parts not yet known."


def pace(subject: Subject) -> Markup:
    """Throughput over time."""
    one = pace_of(subject.run, subject.setting)
    most = max(float(one.picks_per_min.max()), float(one.arrivals_per_min.max()), 1.0)
    times = one.times_s - subject.zero_s
    frame = Frame((float(times[0]), float(times[-1])), (0.0, most * 1.1))
    picture = chart(f"Picks a minute over time, {one.mean_per_min:.1f} over the whole run",
                    frame.axes("s", "a minute"), frame.line(times, one.arrivals_per_min, 1),
                    frame.line(times, one.picks_per_min, 0),
                    frame.level(one.mean_per_min, f"mean {one.mean_per_min:.1f}"))
    note = f"Over the {one.span_s:.0f} s before each moment. A pick counts when the part is released."
    names = ["picks", "parts entering the window" if subject.setting.cell.belt else "parts arriving"]
    return joined(tag("div", picture, class_="figure"), key(names), tag("p", note, class_="note"))


def cycle(subject: Subject) -> Markup:
    """How the cycles split."""
    split = split_of(subject.run)
    if not len(split):
        return tag("p", "Nothing was picked.")
    mean, total = split.mean(axis=0), split.sum(axis=1)
    bar = stacked([(name, float(amount), STYLE[name]) for name, amount in zip(SPLIT, mean, strict=True)],
                  f"The mean cycle of {total.mean():.2f} s, split into its steps")
    rows = [[joined(tag("i", class_=f"swatch phase-{STYLE[name]}"), " ", name), f"{amount:.3f}",
             f"{100 * amount / total.mean():.0f} %", f"{least:.3f}", f"{most:.3f}"]
            for name, amount, least, most in zip(SPLIT, mean, split.min(axis=0), split.max(axis=0), strict=True)]
    rows.append(["whole cycle", f"{total.mean():.3f}", "", f"{total.min():.3f}", f"{total.max():.3f}"])
    head = [("step", False), ("mean s", True), ("share", True), ("least s", True), ("most s", True)]
    return joined(tag("div", bar, class_="figure wide"), plain_table("How a cycle splits", head, rows))


def joints(subject: Subject) -> Markup:
    """Speeds and accelerations against their limits."""
    loads = loads_of(subject.run)
    if loads is None:
        return tag("p", "The arm never moved.")
    head = [("joint", False), ("speed, share of limit", True), ("at s", True), ("acceleration, share of limit", True),
            ("at s", True), ("moves from", True), ("to", True), ("limits", True)]
    rows = []
    for j, (name, limit) in enumerate(zip(JOINTS, subject.setting.cell.arm.joints, strict=True)):
        low, high = loads.range_used[j] * (1.0 if j == 2 else 180 / np.pi)
        unit = "mm" if j == 2 else "°"
        rows.append([name, f"{100 * loads.peak_speed[j]:.0f} %", subject.clock(loads.speed_at_s[j]),
                     f"{100 * loads.peak_accel[j]:.0f} %", subject.clock(loads.accel_at_s[j]), f"{low:.1f} {unit}",
                     f"{high:.1f} {unit}", f"{limit.min:g} to {limit.max:g} {unit}"])
    charts = [_speed(subject, loads, j) for j in range(4)]
    note = "Taken from the path every 2 ms. 100 % is the limit in the cell file; jerk is held by how moves are made."
    return joined(tag("div", *charts, class_="charts"), plain_table("Peaks and range of each joint", head, rows),
                  tag("p", note, class_="note"))


def _speed(subject: Subject, loads: Loads, j: int) -> Markup:
    times = loads.times_s - subject.zero_s
    frame = Frame((float(times[0]), float(times[-1])), (0.0, 110.0), height=130)
    peak = 100 * float(loads.peak_speed[j])
    picture = chart(f"Speed of {JOINTS[j]} over time in percent of its limit, at most {peak:.0f}",
                    frame.axes("s", f"{JOINTS[j]} speed, % of limit"), frame.line(times, 100 * loads.speed[:, j], 0),
                    frame.level(100.0, "", "limit"), height=130)
    return tag("div", picture, class_="figure")


def choices(subject: Subject) -> Markup:
    """How good each decision was against its bound."""
    one = choices_of(subject.run)
    if not one.decisions:
        return tag("p", "Nothing was decided.")
    looked = f"{np.mean(one.looked_at):.1f} parts were in view at a decision on average, {max(one.looked_at)} at most."
    if not one.bounded:
        return tag("p", f"The order {subject.run.order} takes the next part by a rule and knows no bound. ", looked)
    told = f"{one.best} of {one.bounded} decisions reached their bound: no sequence over the parts in view picks more. "
    behind = [gap for gap in one.gaps if gap > EQUAL]
    if not behind:
        return joined(tag("p", told, looked), tag("p", BOUND, class_="note"))
    told += f"The others may fall short by {100 * np.mean(behind):.1f} %, {100 * max(behind):.1f} % at most. "
    frame = Frame((1.0, float(max(one.bounded, 2))), (0.0, max(100 * max(one.gaps), 1.0) * 1.1))
    numbers = np.arange(1, one.bounded + 1)
    picture = chart("Gap of each decision to its bound, in percent", frame.axes("", "gap, %, decision by decision"),
                    *(tag("circle", cx=round(float(frame.x(n)), 1), cy=round(float(frame.y(100 * gap)), 1), r=2.5,
                          class_="dot") for n, gap in zip(numbers.tolist(), one.gaps, strict=True)))
    return joined(tag("p", told, looked), tag("div", picture, class_="figure"),
                  tag("p", BOUND, class_="note"))
