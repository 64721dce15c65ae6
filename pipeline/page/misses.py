"""Why parts were missed: how many for each reason, what it means, what would help, and every case."""

from pipeline.page.glyphs import named
from pipeline.page.head import words
from pipeline.page.markup import Markup, joined, tag
from pipeline.page.subject import Subject

MEANING = {
    "too_late": ("The part left the window before the arm could come for it.",
                 "A wider window, a slower belt, shorter dwells, or an order that looks further ahead."),
    "out_of_reach": ("Nowhere in the window can the arm stand over the part.",
                     "Guide the parts nearer to the arm, or move its base: sanderling reach suggests one."),
    "joint_limit": ("A joint would pass its limit, or the arm would come too near its stretched or folded pose.",
                    "Turn the arm's base or the tool, or add a grip that stands turned to the first one."),
    "keepout": ("The arm or the tool would come into a keep-out.",
                "Move what stands there, or raise travel_mm where passing above it is allowed."),
    "no_room": ("Another part lies where the jaws would come down.",
                "Spread the parts further apart, slimmer jaws, or a second grip for this kind."),
    "wrong_side": ("The part lies on its wrong side.", "Turn it over upstream, or lead it back."),
    "unknown": ("The thing is none of the taught parts.",
                "Teach it if it should be picked; otherwise nothing is amiss."),
    "low_score": ("The part was seen less clearly than asked for.",
                  "Look at its frame: light, dirt, or a part half out of view; or teach the part again."),
    "place_full": ("There was no free slot to set the part down in.",
                   "Exchange the tray in time (endless = true), or give the kind a further place."),
}  # fmt: skip


def misses(subject: Subject) -> Markup:
    """The section; says so where nothing was missed."""
    if not subject.missed:
        return tag("p", "Every part that was seen was picked.")
    groups: dict[str, list[int]] = {}
    for k, fate in subject.missed:
        groups.setdefault(fate.reason, []).append(k)
    order = sorted(groups, key=lambda reason: (-len(groups[reason]), reason))
    most = len(groups[order[0]])
    return joined(*(_reason(subject, reason, groups[reason], most) for reason in order))


def _reason(subject: Subject, reason: str, missed: list[int], most: int) -> Markup:
    meaning, remedy = MEANING.get(reason, ("", ""))
    bar = tag("svg", tag("rect", width=round(100 * len(missed) / most, 2), height=6, rx=1), class_="bar",
              viewBox="0 0 100 6", preserveAspectRatio="none", aria_hidden="true")  # fmt: skip
    told = _instance(subject, missed[0])
    cases = tag("details", tag("summary", f"All {len(missed)}, for instance {told}" if len(missed) > 1 else told),
                tag("ul", *(_case(subject, k) for k in missed), class_="cases"))
    help_ = tag("span", "What may help: ", remedy, class_="remedy") if remedy else None
    title = tag("h3", tag("b", len(missed)), " ", words(reason))
    return tag("article", title, bar, tag("p", meaning, " ", help_), cases, class_="reason")


def _instance(subject: Subject, k: int) -> str:
    fate = subject.run.fates[k]
    return f"part {subject.run.parts[k].number}: {fate.detail if fate else ''}"


def _case(subject: Subject, k: int) -> Markup:
    part, fate = subject.run.parts[k], subject.run.fates[k]
    return tag("li", jump(f"part {part.number}", subject.best_moment_s(k), subject, part.number), " ",
               named(part.kind, subject.kinds), " ", tag("span", fate.told if fate else "", class_="detail"))


def jump(text: str, at_s: float, subject: Subject, part: int) -> Markup:
    """A link to a moment on the desk, with a part picked out; plain text to a reader without script."""
    return tag("a", text, href="#desk", class_="jump", data_t=subject.clock(at_s), data_part=part)
