"""Kinds told apart by shape and colour: marks for the page, six colours that colour-blind readers can tell apart.

The style sheet's colours were searched for: 10 units of CIELAB and more between any two as seen with normal, protan and
deutan sight (the tests say how), and 3 to 1 in contrast with every ground they lie on.
"""

from pipeline.page.markup import Markup, escaped, joined, tag

SHAPES = (
    "M5 0A5 5 0 1 1 -5 0A5 5 0 1 1 5 0Z", "M-4.5 -4.5H4.5V4.5H-4.5Z", "M0 -5.5L5.2 4H-5.2Z", "M0 -6L6 0L0 6L-6 0Z",
    "M0 5.5L5.2 -4H-5.2Z", "M-1.8 -5.4H1.8V-1.8H5.4V1.8H1.8V5.4H-1.8V1.8H-5.4V-1.8H-1.8Z",
    "M-3 -5.2H3L6 0L3 5.2H-3L-6 0Z",
)  # fmt: skip
COLOURS = 6
UNKNOWN = "M-4.8 -3.2L-3.2 -4.8L0 -1.6L3.2 -4.8L4.8 -3.2L1.6 0L4.8 3.2L3.2 4.8L0 1.6L-3.2 4.8L-4.8 3.2L-1.6 0Z"


def shape_of(index: int) -> str:
    """Path of a kind's mark, about 12 units across its middle; -1: not recognised."""
    return UNKNOWN if index < 0 else SHAPES[index % len(SHAPES)]


def glyph(index: int) -> Markup:
    """The mark of a kind as a small picture, hidden from screen readers: the name stands beside it."""
    colour = "kind-unknown" if index < 0 else f"kind-{index % COLOURS}"
    return tag("svg", tag("path", d=shape_of(index)), class_=f"glyph {colour}", viewBox="-7 -7 14 14", width=14,
               height=14, aria_hidden="true", focusable="false")


def named(kind: str, kinds: list[str]) -> Markup:
    """A kind's mark and name."""
    return joined(glyph(kinds.index(kind) if kind in kinds else -1), " ", escaped(kind or "not recognised"))
