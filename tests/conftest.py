"""Folders that tests read from."""

from pathlib import Path

import pytest

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
