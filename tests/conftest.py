"""Fixtures that many tests share: the sample, published once a run."""

import os
from pathlib import Path

import pytest

os.environ.setdefault("PREFECT_SERVER_ANALYTICS_ENABLED", "false")

ROOT = Path(__file__).resolve().parent.parent


def build_sample(store: Path, desk: Path | None = None, raw: Path | None = None) -> Path:
    """Publish the sample into a store, market after market in this process."""
    from catalog.declarations import SAMPLE_DESK
    from catalog.night import begin, build_one, finish
    from catalog.places import Places, write_lock

    with write_lock(Places(store)):
        night = begin(desk or SAMPLE_DESK, raw, store, "build")
        finish(night, [build_one(night, market) for market in night.markets])
    return store


@pytest.fixture(scope="session")
def sample_store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A store that holds the published sample; tests only read it."""
    return build_sample(tmp_path_factory.mktemp("sample") / "published")
