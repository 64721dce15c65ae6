"""Data kept beside the checkout: large recordings and open reference data. Tests that need it skip without it."""

from pathlib import Path

import pytest

BESIDE = Path(__file__).parents[2] / "shared"


def _folder(name: str) -> Path:
    if not (BESIDE / name).is_dir():
        pytest.skip(f"no {name} beside the checkout")
    return BESIDE / name


@pytest.fixture(scope="session")
def recordings_folder() -> Path:
    """Recordings with true poses."""
    return _folder("recordings")


@pytest.fixture(scope="session")
def reference_folder() -> Path:
    """Open data of others: images, ordering instances."""
    return _folder("reference")
