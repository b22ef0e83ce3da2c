"""Species: published values, the closed form of uncertainty, and the species file."""

import copy
import tomllib

import numpy as np
import pytest
import tomli_w
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import norm

from habitat.errors import InputError, UnitError
from habitat.files import read_toml
from habitat.species import PARAMETERS, Response, Species, read_species, write_species

COVARIANCE = ((0.004, 0.002, 0.0, 0.001), (0.002, 0.006, 0.0, 0.0), (0.0, 0.0, 0.0025, 0.0), (0.001, 0.0, 0.0, 0.0030))
PRAWN = Species("Example prawn", 10.0, Response(1.10, 0.30), Response(2.40, 0.62), covariance=COVARIANCE)

KPA_PER_ATM = 101.325
# A metabolic index with A0 = 25 atm-1 and E0 = 0.4 eV at 15 degC (Deutsch et al. 2020, Nature 585:557, methods).
INDEX = Species("index", 15.0, Response(25.0 / KPA_PER_ATM, 0.0), Response(1.0, 0.40))


# --- published values --------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("atm", "temperature", "index"),
    # Worked from the published formula, to the digits printed.
    [(0.21, 5.0, 9.36871), (0.21, 15.0, 5.25000), (0.21, 25.0, 3.05852), (0.05, 10.0, 1.66131)],
)
def test_metabolic_index_of_the_published_form(atm, temperature, index):
    assert INDEX.metabolic_index(atm * KPA_PER_ATM, temperature) == pytest.approx(index, abs=5e-6)


@pytest.mark.parametrize(("temperature", "pcrit"), [(5.0, 2.27120), (15.0, 4.05300), (25.0, 6.95705)])
def test_pcrit_where_the_index_is_one(temperature, pcrit):
    assert INDEX.pcrit(temperature) == pytest.approx(pcrit, abs=5e-6)  # same source as above
    assert INDEX.metabolic_index(INDEX.pcrit(temperature), temperature) == pytest.approx(1.0)


Q10 = {  # energy [eV]: Q10 over 0-10, 10-20 and 0-30 degC, from exp((E/kB)(1/T1 - 1/T2))^(10/(t2-t1))
    0.20: (1.3500, 1.3226, 1.3235),
    0.29: (1.5451, 1.5000, 1.5014),
    0.40: (1.8224, 1.7493, 1.7517),
    0.60: (2.4602, 2.3136, 2.3183),
    0.65: (2.6519, 2.4812, 2.4866),
    0.70: (2.8585, 2.6608, 2.6671),
    1.20: (6.0526, 5.3530, 5.3747),
}


@pytest.mark.parametrize("energy", Q10)
def test_activation_energy_as_q10(energy):
    # A constant supply capacity makes Pcrit proportional to the rate.
    animal = Species("x", 10.0, Response(1.0, 0.0), Response(1.0, energy))
    spans = ((0.0, 10.0), (10.0, 20.0), (0.0, 30.0))
    found = [(animal.pcrit(warm) / animal.pcrit(cold)) ** (10 / (warm - cold)) for cold, warm in spans]
    assert found == pytest.approx(Q10[energy], abs=5.1e-5)


def test_pcrit_of_atlantic_cod(tmp_path):
    """Claireaux et al. 2000, J. Sea Res. 44:257: resting rate 54.3 mg/kg/h at 10 degC, and the largest rate, 177."""
    # Supply capacity from 177 mg/kg/h at air saturation (S 35, 10 degC: 20.97145 kPa): 0.2638 umol/g/h/kPa, and
    # Pcrit = 6.434 kPa. The species file takes both in mg.
    path = tmp_path / "cod.toml"
    content = {
        "name": "Atlantic cod",
        "reference_temperature": 10.0,
        "supply_capacity": {"value": 177 / 20.97145, "unit": "mg/kg/h/kPa", "activation_energy": 0.0},
        "resting_rate": {"value": 54.3, "unit": "mg/kg/h", "activation_energy": 0.0},
    }
    path.write_text(tomli_w.dumps(content), encoding="utf-8")
    cod = read_species(path)
    assert cod.supply_capacity.value == pytest.approx(0.2638, abs=5e-5)
    assert cod.pcrit(10.0) == pytest.approx(6.434, abs=5e-4)


# --- laws --------------------------------------------------------------------------------------------------------

ENERGIES = st.floats(-0.5, 1.5)
TEMPERATURES = st.floats(-2, 35)


@given(factor=st.floats(0.01, 100), temperature=TEMPERATURES)
def test_scaling_supply_and_rate_together_changes_nothing(factor, temperature):
    scaled = Species("x", 10.0, Response(1.10 * factor, 0.30), Response(2.40 * factor, 0.62), covariance=COVARIANCE)
    assert scaled.pcrit(temperature, 0.2) == pytest.approx(PRAWN.pcrit(temperature, 0.2))


@given(supply=ENERGIES, rate=ENERGIES, temperature=TEMPERATURES, warming=st.floats(0, 10))
def test_warming_raises_pcrit_when_the_rate_responds_more_than_the_supply(supply, rate, temperature, warming):
    animal = Species("x", 10.0, Response(1.0, min(supply, rate)), Response(2.0, max(supply, rate)))
    assert animal.pcrit(temperature + warming) >= animal.pcrit(temperature) * (1 - 1e-12)


@given(temperature=TEMPERATURES, low=st.floats(0.01, 0.99), high=st.floats(0.01, 0.99))
def test_quantiles_of_pcrit_rise_with_the_quantile(temperature, low, high):
    low, high = min(low, high), max(low, high)
    assert PRAWN.pcrit(temperature, low) <= PRAWN.pcrit(temperature, high)


@given(temperature=TEMPERATURES, quantile=st.floats(0.01, 0.99), activity=st.floats(0.5, 5))
def test_the_chance_at_a_quantile_of_the_need_is_that_quantile(temperature, quantile, activity):
    needed = activity * PRAWN.pcrit(temperature, quantile)
    assert PRAWN.chance(needed, temperature, activity) == pytest.approx(quantile, abs=1e-9)


def test_log_pcrit_sd_is_the_quadratic_form():
    temperature = np.array([-1.0, 4.0, 10.0, 25.0])
    x = (1 / 283.15 - 1 / (temperature + 273.15)) / 8.617333262e-5
    gradients = np.stack([-np.ones(4), np.ones(4), -x, x], axis=-1)  # of ln rate - ln alpha + (E_rate - E_alpha) x
    expected = np.sqrt(np.einsum("ni,ij,nj->n", gradients, np.array(COVARIANCE), gradients))
    np.testing.assert_allclose(PRAWN.log_pcrit_sd(temperature), expected, rtol=1e-12)


def test_chance_without_covariance_is_a_step():
    certain = Species("x", 10.0, Response(1.0, 0.0), Response(4.0, 0.0))
    assert certain.chance(np.array([3.999, 4.0, 4.001, 0.0, -1.0]), 10.0).tolist() == [0, 1, 1, 0, 0]
    assert certain.log_pcrit_sd(10.0) == 0
    assert certain.pcrit(10.0, 0.95) == certain.pcrit(10.0)


def test_chance_of_missing_and_of_no_oxygen():
    po2, temperature = np.array([np.nan, 3.0, 0.0, -0.5]), np.array([10.0, np.nan, 10.0, 10.0])
    np.testing.assert_array_equal(PRAWN.chance(po2, temperature), [np.nan, np.nan, 0.0, 0.0])


def test_lazy_arrays_stay_lazy(no_compute):
    eager = xr.DataArray(np.linspace(0.5, 20, 12).reshape(3, 4), dims=("cast", "level"))
    lazy = eager.chunk({"cast": 1})
    calls = {
        "pcrit": lambda values: PRAWN.pcrit(values, 0.9),
        "sd": PRAWN.log_pcrit_sd,
        "index": lambda values: PRAWN.metabolic_index(values, values),
        "chance": lambda values: PRAWN.chance(values, values, 2.0),
        "draw": lambda values: PRAWN.pcrit_of_draw(values, (0.1, 0.02)),
    }
    with no_compute():
        results = {name: call(lazy) for name, call in calls.items()}
    for name, result in results.items():
        assert result.chunks == ((1, 1, 1), (4,))
        xr.testing.assert_identical(result.compute(), calls[name](eager))


# --- sampling ----------------------------------------------------------------------------------------------------

DRAWS = 20_000


def sampled_pcrit(temperature):
    """Pcrit [kPa] of draws from the four-dimensional Gaussian, one value a draw."""
    rng = np.random.default_rng(20)
    means = [np.log(1.10), np.log(2.40), 0.30, 0.62]
    ln_capacity, ln_rate, capacity_energy, rate_energy = rng.multivariate_normal(means, np.array(COVARIANCE), DRAWS).T
    x = (1 / 283.15 - 1 / (temperature + 273.15)) / 8.617333262e-5
    return np.exp(ln_rate - ln_capacity + (rate_energy - capacity_energy) * x)


@pytest.mark.parametrize("temperature", [0.0, 10.0, 22.0])
@pytest.mark.parametrize("quantile", [0.05, 0.25, 0.5, 0.95])
def test_quantiles_of_pcrit_are_those_of_samples(temperature, quantile):
    sample = np.log(sampled_pcrit(temperature))
    # Standard error of a quantile: sqrt(q (1 - q) / n) / density there; 4 of them.
    deviation = PRAWN.log_pcrit_sd(temperature)
    density = norm.pdf(norm.ppf(quantile)) / deviation
    error = np.sqrt(quantile * (1 - quantile) / DRAWS) / density
    assert np.quantile(sample, quantile) == pytest.approx(np.log(PRAWN.pcrit(temperature, quantile)), abs=4 * error)


@pytest.mark.parametrize("temperature", [0.0, 10.0, 22.0])
@pytest.mark.parametrize("po2", [3.0, 4.0, 5.0])
def test_the_chance_is_that_of_samples(temperature, po2):
    chance = PRAWN.chance(po2, temperature, 2.0)
    share = np.mean(po2 >= 2.0 * sampled_pcrit(temperature))
    # Standard error of a share: sqrt(p (1 - p) / n); 4 of them, and one sample where p is all but 0 or 1.
    assert share == pytest.approx(chance, abs=4 * np.sqrt(chance * (1 - chance) / DRAWS) + 1 / DRAWS)


@pytest.mark.parametrize(("count", "tolerance"), [(64, 0.04), (1024, 0.003)])
def test_draws_have_the_spread_and_quantiles_of_the_closed_form(count, tolerance):
    draws = PRAWN.draws(count)
    assert draws.shape == (count, 2)
    np.testing.assert_allclose(draws.mean(axis=0), 0, atol=1e-12)  # centred cells are symmetric about the median
    for temperature in (0.0, 5.0, 10.0, 15.0, 22.0):
        pcrit = [PRAWN.pcrit_of_draw(temperature, draw) for draw in draws]
        # Measured over all directions: the spread is off by at most 3.3 % for 64 draws, 0.2 % for 1024.
        assert np.std(np.log(pcrit)) == pytest.approx(PRAWN.log_pcrit_sd(temperature), rel=tolerance)
        for quantile in (0.05, 0.5, 0.95):
            # Quasi-random points must beat random ones, whose rank has the standard error sqrt(q (1 - q) / n).
            error = np.sqrt(quantile * (1 - quantile) / count)
            low, high = (PRAWN.pcrit(temperature, quantile + sign * error) for sign in (-1, 1))
            assert low <= np.quantile(pcrit, quantile) <= high


def test_draws_are_the_same_in_every_run():
    np.testing.assert_array_equal(PRAWN.draws(32), PRAWN.draws(32))


def test_draws_without_uncertainty_are_zero():
    assert not Species("x", 10.0, Response(1.0, 0.0), Response(1.0, 0.0)).draws(8).any()


def test_draws_of_a_singular_covariance():
    rank_one = np.outer([0.1, -0.1, 0.05, 0.0], [0.1, -0.1, 0.05, 0.0])
    animal = Species("x", 10.0, Response(1.0, 0.3), Response(2.0, 0.6), covariance=tuple(map(tuple, rank_one)))
    log_shift, energy_shift = animal.draws(64).T
    np.testing.assert_allclose(energy_shift, log_shift / 4)  # (-0.05) / (-0.2)


# --- body mass ---------------------------------------------------------------------------------------------------


def test_values_scale_with_body_mass():
    animal = Species("x", 10.0, Response(1.0, 0.3, -0.25), Response(2.0, 0.6, -0.20), body_mass=2.0)
    heavy = animal.at_mass(32.0)  # 16 times: 16^-0.25 = 1/2, 16^-0.2 = 0.574349
    assert heavy.supply_capacity.value == pytest.approx(0.5)
    assert heavy.resting_rate.value == pytest.approx(2 * 0.574349, rel=1e-6)
    assert heavy.body_mass == 32.0
    assert heavy.at_mass(2.0).pcrit(17.0) == pytest.approx(animal.pcrit(17.0))


@pytest.mark.parametrize("mass", [0.0, -1.0, float("nan")])
def test_an_impossible_body_mass_is_refused(mass):
    animal = Species("x", 10.0, Response(1.0, 0.3, -0.25), Response(2.0, 0.6), body_mass=2.0)
    with pytest.raises(InputError, match=rf"^x: body mass {mass} g; expected a positive number of grams$"):
        animal.at_mass(mass)


@pytest.mark.parametrize(("body_mass", "exponent"), [(None, -0.2), (2.0, 0.0)])
def test_another_mass_needs_mass_and_exponent(body_mass, exponent):
    animal = Species("x", 10.0, Response(1.0, 0.3, exponent), Response(2.0, 0.6), body_mass=body_mass)
    with pytest.raises(
        InputError, match=r"^x: a body mass of 3\.0 g is asked for.*add body_mass, and mass_exponent in"
    ):
        animal.at_mass(3.0)


# --- the species file --------------------------------------------------------------------------------------------

POSITIVE = st.floats(1e-6, 1e6)
NAMES = st.text(st.characters(codec="utf-8", exclude_categories=("Cs",)), min_size=1)
LEAVES = st.one_of(st.booleans(), st.integers(-(2**60), 2**60), st.floats(allow_nan=False), NAMES)
NESTED = st.recursive(LEAVES, lambda leaf: st.lists(leaf, max_size=3) | st.dictionaries(NAMES, leaf, max_size=3))
PROVENANCE = st.dictionaries(NAMES, NESTED, max_size=3)


@st.composite
def species(draw):
    body_mass = draw(st.none() | POSITIVE)
    exponents = st.floats(-1, 1) if body_mass else st.just(0.0)
    energies = st.floats(-1, 2)
    low, high = sorted(draw(st.tuples(st.floats(-2, 40), st.floats(-2, 40))))
    root = np.array(draw(st.lists(st.floats(-0.3, 0.3), min_size=16, max_size=16))).reshape(4, 4)
    matrix = root @ root.T
    matrix = (matrix + matrix.T) / 2
    return Species(
        draw(NAMES),
        draw(st.floats(-2, 40)),
        Response(draw(POSITIVE), draw(energies), draw(exponents)),
        Response(draw(POSITIVE), draw(energies), draw(exponents)),
        temperature_range=(low, high) if low < high and draw(st.booleans()) else None,
        body_mass=body_mass,
        covariance=tuple(map(tuple, matrix.tolist())) if draw(st.booleans()) else None,
        provenance=draw(PROVENANCE),
    )


@given(animal=species())
def test_writing_and_reading_gives_an_equal_species(animal, tmp_path_factory):
    path = tmp_path_factory.mktemp("species") / "s.toml"
    write_species(animal, path)
    assert read_species(path) == animal


def test_numbers_from_numpy_are_written_as_numbers(tmp_path):
    path = tmp_path / "s.toml"
    animal = Species("x", np.float64(10.0), Response(np.float64(1.1), np.float64(0.3)), Response(2.4, 0.6))
    write_species(animal, path)
    assert tomllib.loads(path.read_text(encoding="utf-8"))["supply_capacity"]["value"] == 1.1
    assert read_species(path) == animal


def test_whole_numbers_serve_as_numbers(tmp_path):
    path = tmp_path / "s.toml"
    path.write_text(tomli_w.dumps(content(("reference_temperature",), 10, "set")), encoding="utf-8")
    assert read_species(path).reference_temperature == 10.0


CONTENT = {
    "name": "Example prawn",
    "reference_temperature": 10.0,
    "temperature_range": [4.0, 16.0],
    "body_mass": 2.5,
    "supply_capacity": {"value": 1.10, "unit": "umol/g/h/kPa", "activation_energy": 0.30},
    "resting_rate": {"value": 2.40, "unit": "umol/g/h", "activation_energy": 0.62},
    "uncertainty": {"order": list(PARAMETERS), "covariance": [list(row) for row in COVARIANCE]},
}


def content(place, value, action):
    """The example species with one key set or removed."""
    changed = copy.deepcopy(CONTENT)
    table = changed
    for part in place[:-1]:
        table = table[part]
    if action == "set":
        table[place[-1]] = value
    else:
        del table[place[-1]]
    return changed


def test_covariance_in_another_order(tmp_path):
    order = ["resting_energy", "ln_resting_rate", "ln_supply_capacity", "supply_energy"]
    places = [PARAMETERS.index(name) for name in order]
    rows = [[COVARIANCE[i][j] for j in places] for i in places]
    path = tmp_path / "s.toml"
    path.write_text(
        tomli_w.dumps(content(("uncertainty",), {"order": order, "covariance": rows}, "set")), encoding="utf-8"
    )
    assert read_species(path).covariance == COVARIANCE


def diagonal(*values):
    return np.diag(values).tolist()


ASYMMETRIC = [[0.004, 0.002, 0.0, 0.0], [0.001, 0.006, 0.0, 0.0], [0.0, 0.0, 0.0025, 0.0], [0.0, 0.0, 0.0, 0.003]]
IMPOSSIBLE = [[1.0, 2.0, 0.0, 0.0], [2.0, 1.0, 0.0, 0.0], [0.0, 0.0, 1.0, 0.0], [0.0, 0.0, 0.0, 1.0]]
MISTAKES = [
    (("supply_capacity", "value"), -1.0, "supply_capacity.value = -1.0; expected more than 0"),
    (("supply_capacity", "value"), 0.0, "supply_capacity.value = 0.0; expected more than 0"),
    (("supply_capacity", "value"), float("nan"), "supply_capacity.value = nan; expected a finite number"),
    (("resting_rate", "value"), "2.4", "resting_rate.value = '2.4'; expected a number"),
    (("resting_rate", "activation_energy"), 62.0, "resting_rate.activation_energy = 62.0; expected 3"),
    (("resting_rate", "unit"), None, "key 'resting_rate.unit' is missing; add it"),
    (("resting_rate",), None, "key 'resting_rate' is missing; add it"),
    (("name",), "", "name = ''; expected a text that is not empty"),
    (("body_mass",), 0.0, "body_mass = 0.0; expected more than 0"),
    (("reference_temperature",), 283.15, "reference_temperature = 283.15; expected 50"),
    (("resting_rat",), {}, "unknown key 'resting_rat'; did you mean 'resting_rate'?"),
    (("supply_capacity", "valeu"), 1.0, "unknown key 'supply_capacity.valeu'; did you mean 'value'?"),
    (("temperature_range",), [16.0, 4.0], "temperature_range: found [16.0, 4.0]; expected [lowest, highest] in degC"),
    (("temperature_range",), [4.0], "temperature_range: found [4.0]; expected [lowest, highest] in degC"),
    (("uncertainty", "order"), ["ln_rate"] * 4, "uncertainty.order: found ['ln_rate',"),
    (("uncertainty", "order"), list(PARAMETERS[:3]), "expected each of ['ln_supply_capacity', 'ln_resting_rate',"),
    (("uncertainty", "covariance"), diagonal(1, 1, 1), "found rows of [3, 3, 3] numbers; expected 4 rows of 4"),
    (("uncertainty", "covariance"), ASYMMETRIC, "not symmetric: row 1, column 2 holds 0.002 but row 2, column 1"),
    (("uncertainty", "covariance"), IMPOSSIBLE, "not positive semi-definite (smallest eigenvalue -1)"),
    (("uncertainty", "covariance"), diagonal(-1.0, 1, 1, 1), "not positive semi-definite (smallest eigenvalue -1)"),
]


@pytest.mark.parametrize(("place", "value", "message"), MISTAKES)
def test_a_mistake_in_a_species_file_is_explained(place, value, message, tmp_path):
    path = tmp_path / "s.toml"
    path.write_text(tomli_w.dumps(content(place, value, "remove" if value is None else "set")), encoding="utf-8")
    with pytest.raises(InputError, match=r"s\.toml: ") as raised:
        read_species(path)
    assert message in str(raised.value)


@pytest.mark.parametrize(
    ("block", "unit", "expected"),
    [
        ("supply_capacity", "umol/g/h", "umol/g/h/kPa"),
        ("resting_rate", "umol/g/h/kPa", "umol/g/h"),
        ("resting_rate", "umol/h", "umol/g/h"),  # of a whole animal
        ("resting_rate", "furlong", "umol/g/h"),
    ],
)
def test_a_unit_of_the_wrong_kind_is_refused(block, unit, expected, tmp_path):
    path = tmp_path / "s.toml"
    path.write_text(tomli_w.dumps(content((block, "unit"), unit, "set")), encoding="utf-8")
    message = rf"s\.toml, \[{block}\]: unit = '{unit}' cannot be used; expected a unit such as {expected}$"
    with pytest.raises(UnitError, match=message):
        read_species(path)


def test_a_mass_exponent_needs_a_body_mass(tmp_path):
    changed = content(("body_mass",), None, "remove")
    changed["resting_rate"]["mass_exponent"] = -0.2
    path = tmp_path / "s.toml"
    path.write_text(tomli_w.dumps(changed), encoding="utf-8")
    with pytest.raises(InputError, match=r"s\.toml: mass_exponent is given without body_mass; add body_mass, the mass"):
        read_species(path)


def test_rounding_in_a_covariance_is_forgiven(tmp_path):
    """Printed digits may leave a singular covariance a hair off symmetric and positive."""
    rank_one = np.outer([0.1, -0.1, 0.05, 0.0], [0.1, -0.1, 0.05, 0.0])
    rank_one[0, 1] *= 1 + 1e-12
    path = tmp_path / "s.toml"
    path.write_text(tomli_w.dumps(content(("uncertainty", "covariance"), rank_one.tolist(), "set")), encoding="utf-8")
    assert read_species(path).covariance is not None


def test_a_missing_species_file_is_named(tmp_path):
    with pytest.raises(InputError, match=r"prawn\.toml: file not found"):
        read_species(tmp_path / "prawn.toml")


def test_the_written_file_is_what_people_write(tmp_path):
    path = tmp_path / "s.toml"
    write_species(PRAWN, path)
    written = read_toml(path)
    assert list(written) == ["name", "reference_temperature", "supply_capacity", "resting_rate", "uncertainty"]
    assert written["supply_capacity"] == {"value": 1.1, "unit": "umol/g/h/kPa", "activation_energy": 0.3}
    assert written["uncertainty"]["order"] == list(PARAMETERS)
