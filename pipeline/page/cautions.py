"""The end of the report: the whole cell file, and what a plan is not."""

from pipeline.page.markup import Markup, joined, tag
from pipeline.page.subject import Subject

CAUTIONS = (
    "This is a study on a computer. Nothing in it has moved an arm, and nothing in it shows that a cell is safe.",
    "Times and rates hold for the limits, latencies and dwells in the cell file. Measure them on the real arm, and "
    "expect what the file leaves out: settling, gripper delays, parts that slip.",
    "Reach, keep-outs and room are judged from above, by polygons and heights. Cables, hoses, guards and people are "
    "not known to the tool.",
    "Before a machine runs, qualified people make a risk assessment of the whole cell (ISO 12100; for robots and their "
    "cells ISO 10218-1 and ISO 10218-2). That assessment, the robot's manual and local codes come before anything "
    "written here.",
    "Run every new plan at reduced speed first, with a hand on the enabling device and nobody inside the guards.",
)  # fmt: skip


def cautions() -> Markup:
    """What to keep in mind before a plan meets a machine."""
    return tag("ul", *(tag("li", line) for line in CAUTIONS), class_="cautions")


def cell_file(subject: Subject) -> Markup:
    """The cell file as it stands on disk; what was read of it where there is no such file."""
    cell = subject.setting.cell
    try:
        text = cell.file.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError):
        text = cell.model_dump_json(indent=2)
    return joined(tag("p", cell.file.name, class_="note"), tag("pre", tag("code", text), tabindex=0,
                                                               role="region", aria_label="The cell file"))  # fmt: skip
