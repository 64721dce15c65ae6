"""report.html: one self-contained file that opens from disk with no network."""

import html
from pathlib import Path
from typing import Any

from pipeline.replay import Run, Setting
from pipeline.study import Seen


def write_page(path: Path, seen: Seen, setting: Setting, run: Run, figures: dict[str, Any]) -> None:
    """Write the report of one run."""
    rows = "".join(f"<tr><td>{html.escape(str(k))}</td><td>{html.escape(str(v))}</td></tr>" for k, v in figures.items())
    path.write_text(f"<!doctype html><meta charset=utf-8><title>{html.escape(seen.cell.name)}</title>"
                    f"<table>{rows}</table>", encoding="utf-8")
