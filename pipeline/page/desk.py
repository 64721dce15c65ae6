"""The desk's elements: the cell from above, the camera's frame, the clock, the timeline. Scripts bring them to life."""

from pipeline.page.glyphs import glyph
from pipeline.page.markup import Markup, joined, tag
from pipeline.page.scene import scene
from pipeline.page.subject import Subject

SPEEDS = (0.1, 0.25, 0.5, 1, 2, 4, 8)
SPANS = ((10, "10 s"), (20, "20 s"), (60, "1 min"), (0, "the whole run"))
NUMBERS = (("j1", "J1"), ("j2", "J2"), ("j3", "J3"), ("j4", "J4"), ("tip", "tip x, y, z"), ("belt", "belt"))
PHASES = (("waiting", "waiting"), ("across", "across"), ("up", "up"), ("down", "down"), ("dwell", "dwell"),
          ("release", "release"))  # fmt: skip


def desk(subject: Subject) -> Markup:
    """The section's content. Without script only a line that says so is shown."""
    no_script = tag("noscript", tag("p", "The moving picture needs a browser with scripts allowed. "
                                         "Everything else on this page reads without.", class_="note"))
    live = tag("div", _views(subject), _controls(subject), _timeline(), class_="live", id_="live", hidden=True)
    data = tag("script", Markup(scene(subject)), type="application/json", id_="scene")
    return joined(no_script, live, data)


def _views(subject: Subject) -> Markup:
    above = tag("figure", tag("canvas", id_="above", role="img", aria_label="The cell from above, to scale"),
                tag("figcaption", _legend(subject)), class_="above")
    camera = tag("figure", tag("div", tag("img", id_="shot", alt=""), tag("canvas", id_="found", role="img",
                 aria_label="What was found in the camera's frame"), class_="frame"),
                 tag("figcaption", id_="shot-told"), class_="camera", id_="camera")  # fmt: skip
    joints = tag("dl", *(tag("div", tag("dt", name), tag("dd", "-", id_=f"now-{key}"))
                         for key, name in NUMBERS), class_="joints")  # fmt: skip
    now = tag("div", tag("p", id_="now", class_="now"), tag("p", id_="told", class_="unseen", role="status"), joints,
              tag("p", id_="next", class_="next"))
    return tag("div", above, tag("div", camera, now, class_="beside"), class_="views")


def _legend(subject: Subject) -> Markup:
    kinds = [tag("span", glyph(k), " ", name) for k, name in enumerate(subject.kinds)]
    fates = [tag("span", tag("i", class_=f"swatch {name}"), " ", text)
             for name, text in (("picked", "will be picked"), ("missed", "will be missed"), ("ahead", "not yet known"))]
    return tag("span", *kinds, *fates, class_="legend")


def _controls(subject: Subject) -> Markup:
    buttons = [tag("button", text, type="button", id_=name, aria_label=label, title=label)
               for name, text, label in (("before", "‹ pick", "Previous pick or miss (p)"), ("play", "Play", "Play"),
                                         ("after", "pick ›", "Next pick or miss (n)"))]  # fmt: skip
    speed = tag("label", "Speed ", tag("select", *(tag("option", f"{s:g}×", value=s, selected=s == 1) for s in SPEEDS),
                                       id_="speed"))  # fmt: skip
    jump = tag("label", "Go to ", tag("select", tag("option", "a pick or a miss", value=""), id_="goto"))
    slider = tag("input", type="range", id_="clock", min=0, max=1, step="any", value=0, aria_label="Time")
    time = tag("output", id_="time", for_="clock", aria_live="off")
    hints = (("space", " plays, "), ("←", " "), ("→", " step 0.1 s, with shift 1 s, "), ("p", " "),
             ("n", " previous and next pick or miss."))  # fmt: skip
    keys = tag("p", *(joined(tag("kbd", name), text) for name, text in hints), class_="note keys")
    overview = tag("canvas", id_="overview", role="img", aria_label="Picks and misses over the whole run")
    row = tag("div", *buttons, speed, jump, time, class_="row")
    return tag("div", row, tag("div", slider, overview, class_="clock"), keys, class_="controls")


def _timeline() -> Markup:
    span = tag("label", "Show ", tag("select", *(tag("option", text, value=s, selected=s == 10) for s, text in SPANS),
                                     id_="span"))  # fmt: skip
    legend = tag("span", *(tag("span", tag("i", class_=f"swatch phase-{name}"), " ", text) for name, text in PHASES),
                 class_="legend")
    return tag("div", tag("div", tag("h3", "What the arm does, and when each part can be gripped"), span, class_="row"),
               tag("canvas", id_="timeline", role="img", aria_label="Timeline of the arm and of each part's window"),
               tag("p", legend, class_="note"), class_="timeline")  # fmt: skip
