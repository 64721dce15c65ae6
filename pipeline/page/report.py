"""The page as a whole: one file, no network, the same bytes for the same run."""

import base64
import hashlib
from collections.abc import Callable, Iterator
from importlib.resources import files
from pathlib import Path
from typing import Any

from pipeline.page import accuracy, cautions, desk, head, listings, measures, misses, reach
from pipeline.page.markup import Markup, joined, tag
from pipeline.page.subject import Subject
from pipeline.replay import Run, Setting
from pipeline.study import Seen

STYLES = ("page.css", "desk.css")
SCRIPTS = ("data.js", "canvas.js", "above.js", "camera.js", "timeline.js", "desk.js", "lists.js")


def write_page(path: Path, seen: Seen, setting: Setting, run: Run, figures: dict[str, Any]) -> None:
    """Write the report of one run. figures: as in summary.json."""
    with open(path, "w", encoding="utf-8") as file:
        file.writelines(_pieces(Subject(seen, setting, run, figures)))


def _pieces(subject: Subject) -> Iterator[str]:
    """The report piece by piece: that of an hour's run is long, and no more than a section is held at once."""
    sections: list[tuple[str, str, Callable[[Subject], Markup | None]]] = [
        ("desk", "The run, moment by moment", desk.desk),
        ("misses", "Why parts were missed", misses.misses),
        ("pace", "Throughput over time", measures.pace),
        ("choices", "How good the decisions were", measures.choices),
        ("reach", "Where the arm can grip, and did", reach.reach),
        ("cycle", "Where the time of a cycle goes", measures.cycle),
        ("joints", "Joints against their limits", measures.joints),
        ("accuracy", "How well places are known", accuracy.accuracy),
        ("lists", "Picks", listings.picks),
        ("all-parts", "Parts", listings.parts),
        ("cell", "The cell file", cautions.cell_file),
        ("cautions", "Cautions", lambda _: cautions.cautions()),
    ]
    style, script = _kept(STYLES), _kept(SCRIPTS)
    name = subject.setting.cell.name or "cell"
    top = tag("head", tag("meta", charset="utf-8"), tag("meta", http_equiv="Content-Security-Policy",
                                                        content=_policy(style, script)),
              tag("meta", name="viewport", content="width=device-width, initial-scale=1"),
              tag("meta", name="color-scheme", content="light dark"), tag("title", f"{name}: replay"),
              tag("link", rel="icon", href="data:,"), tag("style", style))  # fmt: skip
    yield f'<!doctype html>\n<html lang="en">{top}\n<body>'
    yield joined(tag("a", "Skip to the desk", href="#desk", class_="skip"), tag("header", head.head(subject)))
    yield "<main>"
    for at, title, told in sections:
        content = told(subject)
        if content is not None:
            yield tag("section", tag("h2", title, id_=f"{at}-title"), content, id_=at, aria_labelledby=f"{at}-title")
    yield f"</main>{tag('script', script)}</body></html>\n"


def _kept(names: tuple[str, ...]) -> Markup:
    """Text of files that come with the package, joined."""
    return Markup("\n".join(files(__package__).joinpath(name).read_text(encoding="utf-8") for name in names))


def _policy(style: str, script: str) -> str:
    """No network at all; styles and scripts are those of this file, told by their hashes."""
    style_hash, script_hash = (base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()
                               for text in (style, script))
    return (f"default-src 'none'; img-src data:; style-src 'sha256-{style_hash}'; "
            f"script-src 'sha256-{script_hash}'; base-uri 'none'; form-action 'none'")
