"""Writers of small ocean files, and the folder of real measurements."""

from pathlib import Path

import netCDF4
import numpy as np
import pytest

DATA = Path(__file__).parents[3] / "shared" / "data"


@pytest.fixture
def data():
    if not DATA.is_dir():
        pytest.skip("the folder of real measurements, ../shared/data, is absent")
    return DATA


@pytest.fixture
def write(tmp_path):
    """Write a text file; give its path as text."""

    def writer(text, name="cast.csv"):
        path = tmp_path / name
        path.write_text(text, encoding="utf-8")
        return str(path)

    return writer


@pytest.fixture
def write_grid(tmp_path):
    """Write a netCDF grid; `variables` maps a name to (values, attributes), values being (time?, depth, lat, lon)."""

    def writer(variables, name="grid.nc", *, axes=None, time=None, **options):
        axes = {"depth": ([0.0, 50.0, 200.0], {"units": "m", "positive": "down", "standard_name": "depth"})} | (
            axes or {}
        )
        axes.setdefault("lat", ([-10.0, 0.0], {"units": "degrees_north", "standard_name": "latitude"}))
        axes.setdefault("lon", ([200.0, 210.0, 220.0], {"units": "degrees_east", "standard_name": "longitude"}))
        path = tmp_path / name
        with netCDF4.Dataset(path, "w") as file:
            if time is not None:
                axes = {"time": time} | axes
            for axis, (values, attributes) in axes.items():
                file.createDimension(axis, len(values))
                file.createVariable(axis, "f8", (axis,)).setncatts(attributes)
                file[axis][:] = values
            four = ("time", "depth", "lat", "lon")
            for variable, (values, attributes) in variables.items():
                values = np.ma.asarray(values)
                dims = attributes.pop("dims", four[4 - values.ndim :])
                fill = attributes.pop("_FillValue", 9.96921e36)
                file.createVariable(variable, "f4", dims, fill_value=fill, **options).setncatts(attributes)
                file[variable][:] = values
        return str(path)

    return writer


@pytest.fixture
def water():
    """Temperature, salinity and oxygen of a 3 x 2 x 3 grid (depth, lat, lon) in the plainest units."""
    shape = (3, 2, 3)
    fall = np.array([1.0, 0.7, 0.1])[:, None, None] * np.ones(shape)
    step = np.arange(18.0).reshape(shape) / 100

    def maker(**changes):
        variables = {
            "temp": (20 * fall + step, {"units": "degC", "standard_name": "sea_water_temperature"}),
            "salt": (35 + step, {"units": "1", "standard_name": "sea_water_practical_salinity"}),
            "oxy": (
                220 * fall + step,
                {"units": "umol/kg", "standard_name": "moles_of_oxygen_per_unit_mass_in_sea_water"},
            ),
        }
        return variables | changes

    return maker
