"""What all tests share: the folder of real measurements, a guard of laziness, and how hard properties are tried."""

import os
from pathlib import Path

import dask
import pytest
import xarray as xr
from hypothesis import HealthCheck, settings

from habitat.ocean import gridded, open_ocean, opening

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


@pytest.fixture
def damaged_grid(monkeypatch):
    """Copy the example's grid to a path, sound in what is looked at first and damaged in a later step, kept lazy."""

    def write(path: Path) -> None:
        with xr.open_dataset(REPOSITORY / "profiles" / "example" / "halvane_grid.nc") as file:
            whole = file.load()
        chunks = {"chunksizes": (1, 36, 20, 20), "zlib": True, "fletcher32": True}
        whole.to_netcdf(path, encoding=dict.fromkeys(("temperature", "salinity", "oxygen"), chunks))
        content = bytearray(path.read_bytes())
        middle = len(content) * 3 // 4
        content[middle : middle + 2000] = bytes(2000)
        path.write_bytes(content)
        monkeypatch.setattr(opening, "LAZY_LIMIT", 0)
        monkeypatch.setattr(gridded, "CHUNK_SIZE", "60KiB")  # one time step
        open_ocean([path])  # the premise: what is looked at first is whole

    return write
