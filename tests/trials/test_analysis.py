"""Analysis of trials: which estimator gives which number, what is left out, and the table of the contract."""

import numpy as np
import pytest
from invented_trials import simulate_trial

from habitat.errors import InputError
from habitat.trials import classic
from habitat.trials.analysis import (
    RESTING_ESTIMATORS,
    SUPPLY_ESTIMATORS,
    TABLE_COLUMNS,
    analyse,
    provenance,
    reasons,
    species_points,
    trial_table,
)
from habitat.trials.trial import Trial


def trial(name, family="constant", individual="A", seed=1, hours=None, **others):
    invented = simulate_trial(family, np.random.default_rng(seed), **others)
    time = None if hours is None else np.linspace(0.0, hours, invented.po2.size)
    return Trial(name, individual, 10.0, invented.po2, invented.rate, 2.5, 34.0, time, excluded={"missing value": 1})


@pytest.fixture(scope="module")
def trials():
    return [trial("one"), trial("two", "wandering", seed=2), trial("rich", individual="B", reaches_limit=False, seed=3)]


@pytest.fixture(scope="module")
def analyses(trials):
    return analyse(trials)


def test_the_table_is_that_of_the_contract_and_says_nothing_where_nothing_is_known(analyses):
    table = trial_table(analyses)
    assert list(table.columns) == [
        "trial", "individual", "temperature_degC", "n", "sensor_offset_kpa", "sensor_offset_p025", "sensor_offset_p975",
        "supply_capacity", "supply_capacity_p025", "supply_capacity_p975", "resting_rate", "critical_po2_kpa",
        "critical_po2_p025", "critical_po2_p975", "flags",
    ]  # fmt: skip
    assert tuple(table.columns) == TABLE_COLUMNS
    assert table["trial"].tolist() == ["one", "two", "rich"]
    limited = table.iloc[0]
    assert limited["flags"] == ""
    for name in ("sensor_offset", "supply_capacity", "critical_po2"):
        unit = "" if name == "supply_capacity" else "_kpa"
        assert limited[f"{name}_p025"] < limited[name + unit] < limited[f"{name}_p975"]
    rich = table.iloc[2]
    assert "never-limited" in rich["flags"]
    assert np.isnan([rich["supply_capacity"], rich["supply_capacity_p975"], rich["critical_po2_kpa"]]).all()
    assert rich["supply_capacity_p025"] > 0  # a lower bound is what such a trial gives


def test_a_never_limited_trial_gives_its_rate_to_the_species_and_nothing_else(analyses):
    points = species_points(analyses)
    assert [np.isnan(point.ln_supply_capacity) for point in points] == [False, False, True]
    assert np.isfinite([point.ln_resting_rate for point in points]).all()
    assert np.exp(points[0].ln_supply_capacity) == pytest.approx(analyses[0].supply_capacity.value)
    assert points[0].covariance.shape == (2, 2)


@pytest.mark.parametrize("supply", SUPPLY_ESTIMATORS[1:])
def test_published_supply_estimators_give_their_own_number_without_an_interval(trials, supply):
    analysis = analyse(trials[:1], supply=supply)[0]
    po2, rate = trials[0].po2, trials[0].rate
    kink = classic.two_point_correction(po2, rate)
    wanted = {
        "largest": classic.largest_provision(po2, rate),
        "three-largest": classic.largest_provision(po2, rate, count=3),
        "two-point": kink.provision,
    }[supply]
    assert analysis.supply_capacity.value == wanted
    assert np.isnan(analysis.supply_capacity.p025)
    assert analysis.critical_po2.value == pytest.approx(analysis.resting_rate / wanted)
    assert analysis.sensor_offset.value == (kink.offset if supply == "two-point" else 0.0)


@pytest.mark.parametrize("resting", RESTING_ESTIMATORS[1:])
def test_published_resting_rates_come_from_observations_above_pcrit(trials, resting):
    analysis = analyse(trials[:1], resting=resting)[0]
    joint, own = analysis.joint, trials[0]
    free = own.rate[own.po2 + joint.sensor_offset.value > joint.critical_po2.value]
    assert free.size < own.rate.size
    wanted = {
        "rule": classic.resting_rate(free)[0],
        "lowest-normal": classic.lowest_normal(free).mean,
        "lowest-ten": classic.lowest_ten(free),
        "lowest-ten-per-cent": classic.lowest_ten_per_cent(free),
    }
    quantile = np.quantile(free, float(resting.removeprefix("quantile-"))) if resting.startswith("quantile-") else None
    assert analysis.resting_rate == pytest.approx(wanted.get(resting, quantile))


def test_an_individual_shares_its_observations_and_too_few_hours_are_said():
    short = analyse([trial("one", hours=6.0), trial("two", seed=2, hours=6.0)], resting="quantile-0.2")
    assert short[0].resting_rate == short[1].resting_rate  # one animal at one temperature
    assert "over 12.0 h; 24 h or more are recommended" in short[0].notes[0]
    alone = analyse([trial("one"), trial("two", seed=2, individual="B")], resting="quantile-0.2")
    assert alone[0].resting_rate != alone[1].resting_rate
    long = analyse([trial("one", hours=30.0)], resting="quantile-0.2")
    assert long[0].notes == ()


def test_provenance_names_trials_offsets_and_what_was_left_out(analyses):
    said = provenance(analyses, supply="joint", resting="joint")
    assert said["trials"] == ["one", "two", "rich"]
    assert said["trials_used_for_the_rate_only"] == {"rich": "never-limited"}
    assert said["observations_left_out"] == {"missing value": 3}
    assert set(said["sensor_offsets_kpa"]) == {"one", "two"}
    assert reasons(analyses)["never-limited"] == 1


def test_stating_a_drifting_background_widens_the_offset(trials):
    default, wide = analyse(trials[:1])[0], analyse(trials[:1], background_sd=0.03)[0]
    assert np.ptp([wide.sensor_offset.p025, wide.sensor_offset.p975]) > 1.2 * np.ptp(
        [default.sensor_offset.p025, default.sensor_offset.p975]
    )


def test_unknown_estimators_and_short_trials_are_refused(trials):
    with pytest.raises(InputError, match=r"--supply: estimator 'best'; expected one of joint, largest"):
        analyse(trials, supply="best")
    with pytest.raises(InputError, match=r"--resting-rate: estimator 'mean'; expected one of joint, rule"):
        analyse(trials, resting="mean")
    few = Trial("few", "A", 10.0, np.array([5.0, 4.0]), np.array([1.0, 1.0]))
    with pytest.raises(InputError, match=r"trial 'few': 2 observations"):
        analyse([few])
