"""What the tests of the store have in common."""

from pathlib import Path

import pytest

from catalog.places import Places


@pytest.fixture
def places(tmp_path: Path) -> Places:
    """A store that is not there yet."""
    return Places(tmp_path / "store")


@pytest.fixture
def raw(tmp_path: Path) -> Path:
    """A raw folder that is not there yet."""
    return tmp_path / "raw"
