"""Folders that tests read from."""

from pathlib import Path

import pytest

from cameras.boards import checked_board, view_of
from cameras.lens_fit import LensFit, fit_lens

ROOT = Path(__file__).resolve().parents[1]


def _kept_beside(name: str) -> Path:
    """Data kept beside the checkout; the test is skipped where it is not."""
    folder = ROOT.parent / "shared" / name
    if not folder.is_dir():
        pytest.skip(f"no {name} kept beside the checkout")
    return folder


@pytest.fixture(scope="session")
def reference_folder() -> Path:
    """Open data of others: images and instances with known answers."""
    return _kept_beside("reference")


@pytest.fixture(scope="session")
def recordings_folder() -> Path:
    """Rendered recordings with true poses."""
    return _kept_beside("recordings")


@pytest.fixture(scope="session")
def demo() -> Path:
    """The recording that comes with the project."""
    return ROOT / "demo_images" / "bells"


@pytest.fixture(scope="session")
def lens_fits(recordings_folder: Path) -> dict[str, LensFit]:
    """The lens of two rendered recordings, fitted to their own board images."""
    board = checked_board("9x6", 20.0, "", 0.0)
    fits = {}
    for name in ("bells", "mixed"):
        files = sorted((recordings_folder / name / "calibration" / "lens").glob("*.png"))
        fits[name] = fit_lens([view for view in (view_of(file, board) for file in files) if view is not None])
    return fits
