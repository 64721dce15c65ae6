"""report.html: one self-contained file that opens from disk with no network."""

from pipeline.page.report import write_page

__all__ = ["write_page"]
