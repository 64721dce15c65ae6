"""The top of the report: what came out, in one sentence and a handful of figures."""

from pipeline.page.markup import Markup, joined, tag
from pipeline.page.subject import Subject

WORDS = {
    "out_of_reach": "out of reach", "joint_limit": "beyond a joint limit", "keepout": "behind a keep-out",
    "no_room": "no room for the jaws", "wrong_side": "on the wrong side", "unknown": "not recognised",
    "low_score": "not seen clearly", "too_late": "too late", "place_full": "no free slot",
}  # fmt: skip


def head(subject: Subject) -> Markup:
    """Title, sentence, figures, and what the run wants to say."""
    cell, figures = subject.setting.cell, subject.figures
    recording = subject.seen.recording
    title = tag("h1", cell.name or cell.file.name)
    lasted = float(recording.times_s[-1] - recording.times_s[0])
    under = tag("p", f"Replayed by {figures['order']}, looking at up to {figures['horizon']} parts together. "
                     f"{len(recording)} frames over {lasted:.1f} s.", class_="under")
    return joined(title, under, tag("p", _sentence(subject), class_="lead"), _tiles(subject), _remarks(subject))


def _sentence(subject: Subject) -> str:
    figures = subject.figures
    seen, picked, missed = figures["parts_seen"], figures["picked"], sum(figures["missed"].values())
    if not seen:
        return "No part was seen in this recording."
    told = f"{picked} of {seen} parts were picked, {figures['picks_per_min']:.1f} a minute."
    if missed:
        reasons = sorted(figures["missed"].items(), key=lambda item: (-item[1], item[0]))
        if len(reasons) == 1:
            return f"{told} {missed} {'was' if missed == 1 else 'were'} missed: {words(reasons[0][0])}."
        told += f" {missed} were missed: " + ", ".join(f"{many} {words(reason)}" for reason, many in reasons) + "."
    return told


def words(reason: str) -> str:
    """A reason of parts.csv as words."""
    return WORDS.get(reason, reason.replace("_", " "))


def _tiles(subject: Subject) -> Markup:
    figures, run = subject.figures, subject.run
    reasons = len(figures["missed"])
    cycle = sum(figures.get("cycle_s", {}).values())
    tiles = [
        ("picked", figures["picked"], f"of {figures['parts_seen']} seen"),
        ("picks a minute", f"{figures['picks_per_min']:.1f}", f"over {run.end_s - run.start_s:.1f} s"),
        ("missed", sum(figures["missed"].values()), f"for {reasons} reason" + "s" * (reasons > 1) if reasons else ""),
        ("arm busy", f"{100 * figures['arm_busy']:.0f} %", "of the time"),
        ("mean cycle", f"{cycle:.2f} s" if cycle else "-", "rest to rest"),
        ("joint travel", f"{figures['joint_travel_deg_per_pick']:.0f}°", "J1, J2, J4 a pick"),
    ]
    return tag("dl", *(tag("div", tag("dt", name), tag("dd", tag("b", value), " ", tag("small", note)))
                       for name, value, note in tiles), class_="tiles")  # fmt: skip


def _remarks(subject: Subject) -> Markup | None:
    remarks = [*subject.figures.get("notes", []), *subject.figures.get("drift", [])]
    if not remarks:
        return None
    listed = tag("ul", *(tag("li", remark) for remark in remarks))
    return tag("div", tag("h2", "To look into"), listed, class_="remarks")
