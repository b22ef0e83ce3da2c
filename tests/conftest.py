"""What all tests share: the folder of real measurements, a guard of laziness, and how hard properties are tried."""

import os
from pathlib import Path

import dask
import pytest
from hypothesis import HealthCheck, settings

REPOSITORY = Path(__file__).resolve().parents[1]

settings.register_profile("quick", max_examples=40, deadline=None, suppress_health_check=[HealthCheck.too_slow])
settings.register_profile("thorough", settings.get_profile("quick"), max_examples=300)
settings.load_profile("thorough" if os.environ.get("CI") else "quick")


@pytest.fixture(scope="session")
def shared_data() -> Path:
    """Folder of real casts, sections and floats, which is not part of the repository."""
    folder = REPOSITORY.parent / "shared" / "data"
    if not folder.is_dir():
        pytest.skip(f"real measurements are absent: no folder {folder}")
    return folder


@pytest.fixture
def no_compute():
    """Give a context manager inside which any dask computation fails: ``with no_compute(): ...``."""

    def refuse(*_args, **_kwargs):
        raise AssertionError("a lazy array was computed")

    return lambda: dask.config.set(scheduler=refuse)
