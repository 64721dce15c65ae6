"""Picks and parts as tables, with a way to each on the desk."""

from collections.abc import Sequence

from pipeline.page.glyphs import named
from pipeline.page.head import words
from pipeline.page.markup import Child, Markup, joined, tag
from pipeline.page.misses import jump
from pipeline.page.subject import Subject, place_of
from pipeline.tables import degrees

ELBOW = ("right", "left")


def table(caption: str, head: Sequence[tuple[str, bool]], rows: Sequence[Sequence[Child]], id_: str) -> Markup:
    """A table; head: names, and whether the column holds numbers."""
    heads = tag("tr", *(tag("th", tag("span", text), scope="col", class_="number" if number else None)
                        for text, number in head))
    body = [tag("tr", *(tag("td", cell, class_="number" if number else "words" if name == "why" else None)
                        for cell, (name, number) in zip(row, head, strict=True))) for row in rows]
    whole = tag("table", tag("caption", caption), tag("thead", heads), tag("tbody", *body), class_="listing", id_=id_)
    return tag("div", whole, class_="scroll", tabindex=0, role="region", aria_label=caption)


def plain_table(caption: str, head: Sequence[tuple[str, bool]], rows: Sequence[Sequence[Child]]) -> Markup:
    """A small table that needs no sorting; the first column names its rows."""
    heads = tag("tr", *(tag("th", text, scope="col", class_="number" if number else None) for text, number in head))
    body = [tag("tr", tag("th", row[0], scope="row"), *(tag("td", cell, class_="number" if number else None)
                        for cell, (_, number) in zip(row[1:], head[1:], strict=True))) for row in rows]  # fmt: skip
    whole = tag("table", tag("caption", caption), tag("thead", heads), tag("tbody", *body), class_="plain")
    return tag("div", whole, class_="scroll short")


def picks(subject: Subject) -> Markup:
    """The picks, in their order."""
    head = [("pick", True), ("part", True), ("kind", False), ("decided s", True), ("gripped s", True),
            ("released s", True), ("cycle s", True), ("x mm", True), ("y mm", True), ("yaw °", True), ("elbow", False),
            ("place, slot", False), ("in view", True)]
    rows: list[list[Child]] = []
    for n, pick in enumerate(subject.run.picks, 1):
        cycle = pick.cycle
        at = cycle.hold.at_mm + subject.setting.belt.shift_mm(cycle.grasp_start_s)
        rows.append([
            jump(f"{n}", cycle.grasp_start_s, subject, pick.part.number), pick.part.number,
            named(pick.part.kind, subject.kinds), subject.clock(pick.decided_s), subject.clock(cycle.grasp_start_s),
            subject.clock(pick.release_start_s), f"{pick.busy_s:.3f}", f"{at[0]:.1f}",
            f"{at[1]:.1f}", f"{float(degrees(cycle.hold.yaw)):.1f}", ELBOW[cycle.hold.elbow], place_of(pick),
            pick.looked_at])
    return table("Picks, in their order", head, rows, "picks") if rows else tag("p", "Nothing was picked.")


def parts(subject: Subject) -> Markup:
    """Every part that was seen."""
    head = [("part", True), ("kind", False), ("side", False), ("fate", False), ("why", False), ("known s", True),
            ("frames", True), ("score", True), ("x₀ mm", True), ("y₀ mm", True), ("yaw °", True), ("± mm", True)]
    rows: list[list[Child]] = []
    for k, part in enumerate(subject.run.parts):
        fate = subject.run.fates[k]
        pick = subject.pick_of.get(part.number)
        moment = subject.run.picks[pick].cycle.grasp_start_s if pick is not None else subject.best_moment_s(k)
        rows.append([
            jump(f"{part.number}", moment, subject, part.number), named(part.kind, subject.kinds), part.side or "-",
            "missed" if fate else "picked", f"{words(fate.reason)}: {fate.detail}" if fate else "",
            subject.clock(subject.windows[k].known_s), part.frames_seen, f"{part.score:.2f}", f"{part.xy_mm[0]:.1f}",
            f"{part.xy_mm[1]:.1f}", f"{float(degrees(part.yaw_rad)):.1f}", f"{part.sigma_mm:.2f}"])
    note = tag("p", "x₀, y₀ and yaw are the grip frame's pose at belt counts 0; ± is the predicted standard deviation "
                    "of one coordinate.", class_="note")
    return joined(table("Parts, in the order they were first seen", head, rows, "parts"), note)
