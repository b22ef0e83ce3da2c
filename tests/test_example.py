"""The invented example data: made again the same, labelled as invented, and physically possible."""

import importlib.util
import tomllib
from pathlib import Path

import gsw
import numpy as np
import pandas as pd
import pytest
import xarray as xr

from habitat.seawater import po2_from_concentration
from habitat.species import read_species

ROOT = Path(__file__).parents[1]
DATA, EXAMPLES = ROOT / "profiles" / "example", ROOT / "examples"
CASTS = sorted(DATA.glob("*.csv"))

UMOL_PER_ML = 44.6596  # SCOR WG 142, doi:10.13155/45915


def read_cast(path):
    """Read one cast with gsw and pandas only: depth [m], pressure [dbar], oxygen [umol/kg], whatever the file has."""
    table = pd.read_csv(path, comment="#")
    table.columns = [heading.split(" [")[0] for heading in table.columns]
    if "pressure" not in table:
        table["pressure"] = gsw.p_from_z(-table["depth"].to_numpy(), table["latitude"].to_numpy())
    table["depth"] = -gsw.z_from_p(table["pressure"].to_numpy(), table["latitude"].to_numpy())
    columns = ("salinity", "temperature", "pressure", "longitude", "latitude")
    salinity, temperature, pressure, longitude, latitude = (table[name].to_numpy(dtype=float) for name in columns)
    absolute = gsw.SA_from_SP(salinity, pressure, longitude, latitude)
    table["sigma0"] = gsw.sigma0(absolute, gsw.CT_from_t(absolute, temperature, pressure))
    table["at_saturation"] = gsw.O2sol_SP_pt(salinity, gsw.pt0_from_t(absolute, temperature, pressure))
    if "[ml/l]" in path.read_text(encoding="utf-8"):
        table["oxygen"] *= UMOL_PER_ML * 1000.0 / (1000.0 + table["sigma0"])
    return table


@pytest.fixture(params=CASTS, ids=lambda path: path.stem)
def cast(request):
    return read_cast(request.param)


@pytest.fixture
def grid():
    with xr.open_dataset(DATA / "halvane_grid.nc") as dataset:
        return dataset.load()


@pytest.fixture
def field():
    with xr.open_dataset(DATA / "halvane_warming.nc") as dataset:
        return dataset.load()


# --- the files ---------------------------------------------------------------------------------------------------


def test_the_trials_are_made_again_the_same_and_say_that_they_are_invented(tmp_path):
    spec = importlib.util.spec_from_file_location("make_trials", ROOT / "profiles" / "make_trials.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    module.main(tmp_path)
    committed = (EXAMPLES / "veil_prawn_trials.csv").read_text(encoding="utf-8")
    assert (tmp_path / "veil_prawn_trials.csv").read_text(encoding="utf-8") == committed
    assert "invented" in committed.splitlines()[0].lower()


def test_the_generator_writes_the_committed_files(tmp_path):
    spec = importlib.util.spec_from_file_location("make_example", ROOT / "profiles" / "make_example.py")
    generator = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(generator)
    generator.main(tmp_path)
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(path.name for path in DATA.iterdir())
    for path in CASTS:
        assert (tmp_path / path.name).read_bytes() == path.read_bytes(), path.name
    for path in DATA.glob("*.nc"):
        with xr.open_dataset(tmp_path / path.name) as made, xr.open_dataset(path) as committed:
            xr.testing.assert_identical(made, committed)


@pytest.mark.parametrize(
    "path", [*CASTS, *sorted(EXAMPLES.glob("*.toml")), *EXAMPLES.glob("*.geojson")], ids=lambda path: path.name
)
def test_every_text_file_says_that_it_is_invented(path):
    assert "Invented" in path.read_text(encoding="utf-8")


@pytest.mark.parametrize("path", sorted(DATA.glob("*.nc")), ids=lambda path: path.name)
def test_every_netcdf_file_says_that_it_is_invented_and_is_small(path):
    with xr.open_dataset(path) as dataset:
        assert dataset.attrs["comment"].startswith("Invented data")
        assert "invented" in dataset.attrs["title"]
    assert path.stat().st_size < 400_000


def test_the_casts_show_what_readers_must_cope_with():
    headings = [next(line for line in path.read_text().splitlines() if line[0] != "#") for path in CASTS]
    assert sum("oxygen [ml/l]" in heading for heading in headings) == 1
    assert sum("pressure [dbar]" in heading for heading in headings) == 1
    missing = [int(read_cast(path)["oxygen"].isna().sum()) for path in CASTS]
    assert missing == [0, 2, 0, 7, 0, 1, 0, 0]  # the gap of 200 to 260 m, every 10 m, in the fourth cast


@pytest.mark.parametrize("path", sorted(EXAMPLES.glob("basin*.toml")), ids=lambda path: path.name)
def test_what_a_study_names_is_there(path):
    study = tomllib.loads(path.read_text(encoding="utf-8"))
    for pattern in study["ocean"]["files"]:
        assert list(path.parent.glob(pattern)), pattern
    for table in study["species"]:
        read_species(path.parent / table["file"])
    changes = [change for scenario in study["scenario"] for change in (scenario["warming"], scenario["oxygen"])]
    for change in changes:
        if isinstance(change, dict):
            with xr.open_dataset(path.parent / change["file"]) as dataset:
                assert change["variable"] in dataset
    for region in study["region"]:
        assert "box" in region or (path.parent / region["polygon"]).is_file()


# --- the casts ---------------------------------------------------------------------------------------------------


def test_oxygen_of_casts_is_possible(cast):
    saturation = (cast["oxygen"] / cast["at_saturation"]).dropna()
    assert saturation.between(0.0, 1.1).all()
    assert saturation.iloc[0] == pytest.approx(1.02, abs=0.01)  # the mixed layer is made 2 % supersaturated


def test_casts_are_stably_stratified(cast):
    # Sensor noise of 0.006 degC and 0.002 makes 0.003 kg/m3 between two samples of a mixed layer; four times that.
    assert cast["sigma0"].diff().min() > -0.012
    assert cast["sigma0"].iloc[-1] - cast["sigma0"].iloc[0] > 2.0


def test_casts_cool_with_depth(cast):
    assert np.polyfit(cast["depth"], cast["temperature"], 1)[0] < 0
    assert 22.0 < cast["temperature"].iloc[0] < 26.0


def test_casts_stay_above_the_seabed(cast):
    assert cast["depth"].is_monotonic_increasing
    assert cast["depth"].iloc[-1] <= cast["seabed_depth"].iloc[0] + 0.1  # pressures are written to 0.1 dbar


def test_casts_run_from_offshore_to_the_coast_in_one_cruise():
    first = pd.concat([read_cast(path).iloc[[0]] for path in CASTS])
    assert first["longitude"].is_monotonic_increasing
    assert first["longitude"].between(-120, -110).all()
    assert first["latitude"].between(18, 28).all()
    assert pd.to_datetime(first["time"]).is_monotonic_increasing
    assert first["cast"].is_unique


def test_the_oxygen_minimum_is_strong_and_strengthens_towards_the_coast():
    deep = [table for table in map(read_cast, CASTS) if table["depth"].max() > 900]
    cores = [table["oxygen"].min() for table in deep]
    depths = [table["depth"][table["oxygen"].idxmin()] for table in deep]
    assert sum(core < 20 for core in cores) >= len(deep) / 2
    assert cores == sorted(cores, reverse=True)
    assert all(300 < depth < 900 for depth in depths)


# --- the grid and the warming field ------------------------------------------------------------------------------


def test_the_grid_has_water_above_the_seabed_and_nowhere_else(grid):
    in_water = grid["depth"] <= grid["seabed_depth"]
    for name in ("temperature", "salinity", "oxygen"):
        present = np.isfinite(grid[name])
        assert bool((present == in_water).all()), name
    assert int(np.isnan(grid["seabed_depth"]).sum()) > 10  # land
    assert int((grid["seabed_depth"] < 250).sum()) > 5  # shelf


def test_the_grid_is_a_possible_ocean(grid):
    pressure = gsw.p_from_z(-grid["depth"], grid["latitude"])
    absolute = gsw.SR_from_SP(grid["salinity"])
    density = gsw.sigma0(absolute, gsw.CT_from_t(absolute, grid["temperature"], pressure)).transpose(..., "depth")
    # The steps in which values are kept (2**-7 degC, 2**-9) are worth 0.002 kg/m3.
    assert float(density.diff("depth").min()) > -0.003
    saturation = grid["oxygen"] / gsw.O2sol_SP_pt(
        grid["salinity"], gsw.pt0_from_t(absolute, grid["temperature"], pressure)
    )
    assert float(saturation.min()) >= 0.0
    assert float(saturation.max()) <= 1.05


def test_the_oxygen_minimum_of_the_grid_is_strongest_in_the_south_east(grid):
    core = grid["oxygen"].min("depth").where(grid["seabed_depth"] > 900).mean("time")
    south_east = core.sel(latitude=slice(18, 21), longitude=slice(-114, -110)).mean()
    north_west = core.sel(latitude=slice(25, 28), longitude=slice(-120, -116)).mean()
    assert float(south_east) < 12 < 20 < float(north_west)


def test_the_seasons_are_dates_and_the_surface_is_warmest_in_late_summer(grid):
    assert grid["time"].dt.month.to_numpy().tolist() == [2, 5, 8, 11]
    surface = grid["temperature"].isel(depth=0).mean(["latitude", "longitude"])
    assert int(np.argmax(surface.to_numpy())) == 2


def test_the_bounds_of_the_grid_hold_its_centres_and_join(grid):
    for name in ("depth", "latitude", "longitude"):
        bounds = grid[f"{name}_bnds"].to_numpy()
        np.testing.assert_array_equal(bounds[1:, 0], bounds[:-1, 1])
        centres = grid[name].to_numpy()
        assert ((bounds[:, 0] <= centres) & (centres < bounds[:, 1])).all(), name


def test_the_warming_field_covers_the_grid_and_fades_with_depth(grid, field):
    assert field["warming"].attrs["units_metadata"] == "temperature: difference"
    on_grid = field.interp(depth=grid["depth"], latitude=grid["latitude"], longitude=grid["longitude"])
    assert bool(np.isfinite(on_grid.to_array()).all())
    assert bool((field["warming"].diff("depth") < 0).all())
    assert bool((field["oxygen_change"].diff("depth") > 0).all())
    assert float(field["oxygen_change"].max()) < 0 < float(field["warming"].min())


# --- the species -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "temperature", "lowest", "highest"),
    # Typical Pcrit: midwater animals of an OMZ 0.5 to 2 kPa, active fish 3 to 7 kPa.
    [("veil_prawn", 10.0, 0.5, 2.0), ("copper_runner", 15.0, 3.0, 7.0)],
)
def test_species_need_what_such_animals_need(name, temperature, lowest, highest):
    species = read_species(EXAMPLES / f"{name}.toml")
    assert lowest < species.pcrit(temperature) < highest
    within = np.linspace(*species.temperature_range, 20)
    assert (np.diff(species.pcrit(within)) > 0).all()
    assert ((species.log_pcrit_sd(within) > 0.05) & (species.log_pcrit_sd(within) < 0.15)).all()
    assert np.linalg.eigvalsh(species.covariance).min() > 0


def test_the_two_animals_meet_the_oxygen_minimum_differently():
    prawn, runner = (read_species(EXAMPLES / f"{name}.toml") for name in ("veil_prawn", "copper_runner"))
    offshore, inshore = read_cast(CASTS[0]), read_cast(CASTS[5])
    assert changes_of_sign(prawn, 1.0, offshore) == 0  # resting, it lives at all depths offshore
    assert changes_of_sign(prawn, 1.0, inshore) == 2  # and above and below the minimum inshore
    assert changes_of_sign(prawn, 2.5, offshore) == 2  # active, above and below it everywhere
    for table in (offshore, inshore):
        assert changes_of_sign(runner, 1.0, table) == 1  # near the surface only
        assert changes_of_sign(runner, 2.5, table) == 1


def changes_of_sign(species, activity, table):
    """Count the crossings of a cast's oxygen margin."""
    valid = table.dropna(subset="oxygen")
    po2 = po2_from_concentration(
        *(valid[name].to_numpy() for name in ("oxygen", "temperature", "salinity", "pressure"))
    )
    viable = po2 >= activity * species.pcrit(valid["temperature"].to_numpy())
    assert viable[0]
    return int((viable[1:] != viable[:-1]).sum())
