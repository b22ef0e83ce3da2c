"""Species from trials: closed forms of least squares and variance analysis, laws, coverage, what is refused."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import t as student

from habitat.errors import InputError
from habitat.species import Response, Species, read_species, write_species
from habitat.trials.response import TrialPoint, fit_species

TRUTH = Species("truth", 10.0, Response(1.1, 0.30, -0.2), Response(2.4, 0.62, -0.25), body_mass=2.0)
NORMAL_975 = 1.959963984540054  # scipy.stats.norm.ppf(0.975)
SURE = np.zeros((2, 2))


def logs(temperature: float, mass: float = 2.0) -> np.ndarray:
    """True ln alpha and ln rate."""
    animal = TRUTH.at_mass(mass)
    x = animal.inverse_temperature(temperature)
    traits = (animal.supply_capacity, animal.resting_rate)
    return np.array([np.log(trait.value) + trait.activation_energy * x for trait in traits])


def trial(
    individual: int, temperature: float, deviation=(0.0, 0.0), mass: float | None = 2.0, covariance=SURE
) -> TrialPoint:
    alpha, rate = logs(temperature, mass or 2.0) + deviation
    return TrialPoint(f"{individual} at {temperature}", f"i{individual}", temperature, mass, alpha, rate, covariance)


def crossed(
    rng: np.random.Generator,
    individuals: int = 10,
    temperatures=(5.0, 10.0, 15.0),
    between=(0.15, 0.20),
    within=(0.05, 0.08),
    error: float = 0.07,
) -> list[TrialPoint]:
    known = error**2 * np.array([[1.0, 0.3], [0.3, 1.0]])
    points = []
    for individual in range(individuals):
        own = rng.normal(0, between)
        for temperature in temperatures:
            noise = rng.normal(0, within) + rng.multivariate_normal([0, 0], known)
            points.append(trial(individual, temperature, own + noise, covariance=known))
    return points


def parameters(species: Species) -> np.ndarray:
    supply, rest = species.supply_capacity, species.resting_rate
    return np.array([np.log(supply.value), np.log(rest.value), supply.activation_energy, rest.activation_energy])


# --- closed forms ------------------------------------------------------------------------------------------------


def test_exact_data_give_back_the_truth():
    points = [trial(i, t, mass=m) for i, m in enumerate((1, 1.5, 2, 2.5, 3, 4)) for t in (5.0, 9.0, 16.0)]
    species = fit_species(points, name="prawn", reference_temperature=12.0)
    mass = (1 * 1.5 * 2 * 2.5 * 3 * 4) ** (1 / 6)  # geometric mean
    assert species.body_mass == pytest.approx(mass, rel=1e-12)
    expected = [*logs(12.0, mass), 0.30, 0.62]
    np.testing.assert_allclose(parameters(species), expected, rtol=1e-8)
    exponents = (species.supply_capacity.mass_exponent, species.resting_rate.mass_exponent)
    assert exponents == pytest.approx((-0.2, -0.25), rel=1e-8)
    assert np.abs(species.covariance).max() < 1e-5  # no trial counts as surer than 0.1 %
    assert (species.name, species.reference_temperature, species.temperature_range) == ("prawn", 12.0, (5.0, 16.0))


def test_one_trial_an_individual_is_ordinary_least_squares():
    """With the same regressors for both traits the estimate is least squares of each, with t intervals of n - 2."""
    rng = np.random.default_rng(1)
    temperatures = np.array([4.0, 6.0, 9.0, 9.5, 12.0, 15.0, 16.0])
    deviations = rng.normal(0, (0.2, 0.3), (7, 2)) @ [[1.0, 0.5], [0.0, 1.0]]
    points = [trial(i, t, d, mass=None) for i, (t, d) in enumerate(zip(temperatures, deviations, strict=True))]
    x = TRUTH.inverse_temperature(temperatures)
    reference = 1 / ((1 / (temperatures + 273.15)).mean()) - 273.15  # where x is at its mean
    species = fit_species(points, name="x", reference_temperature=reference)

    values = np.array([[p.ln_supply_capacity, p.ln_resting_rate] for p in points])
    design = np.stack([np.ones(7), x - x.mean()], axis=-1)
    expected, *_ = np.linalg.lstsq(design, values, rcond=None)
    np.testing.assert_allclose(parameters(species), expected.ravel(), rtol=1e-7)
    misfit = values - design @ expected
    residual = misfit.T @ misfit / 5
    wider = (student.ppf(0.975, 5) / NORMAL_975) ** 2
    np.testing.assert_allclose(
        species.covariance, wider * np.kron(np.diag([1 / 7, 1 / np.sum((x - x.mean()) ** 2)]), residual), rtol=1e-3,
        atol=1e-12 + 1e-6 * residual.max(),
    )  # fmt: skip
    assert species.provenance["temperature_response"]["degrees_of_freedom"]["resting_energy"] == pytest.approx(
        5, abs=0.1
    )


def test_balanced_trials_are_a_variance_analysis():
    """Levels vary with the mean square between individuals, energies with that within (analysis of variance)."""
    count, temperatures = 8, np.array([5.0, 10.0, 15.0])
    points = crossed(np.random.default_rng(2), count, temperatures, within=(0.05, 0.08), error=0.0)
    x = TRUTH.inverse_temperature(temperatures)
    reference = 1 / ((1 / (temperatures + 273.15)).mean()) - 273.15
    species = fit_species(points, name="x", reference_temperature=reference)

    values = np.array([[p.ln_supply_capacity, p.ln_resting_rate] for p in points]).reshape(count, 3, 2)
    centred = x - x.mean()
    means = values.mean(axis=1)
    between = 3 * means.var(axis=0, ddof=1)
    slopes = np.einsum("t,itk->k", centred, values) / (count * np.sum(centred**2))
    misfit = values - means[:, None] - centred[:, None] * slopes
    freedom = count * 3 - count - 1
    within = np.sum(misfit**2, axis=(0, 1)) / freedom
    assert (between > within).all()  # otherwise the scatter between individuals would be at its bound
    np.testing.assert_allclose(parameters(species), [*means.mean(axis=0), *slopes], rtol=1e-8)
    variances = [*(between / (3 * count)), *(within / (count * np.sum(centred**2)))]
    wider = (student.ppf(0.975, np.array([count - 1, count - 1, freedom, freedom])) / NORMAL_975) ** 2
    np.testing.assert_allclose(np.diag(species.covariance), wider * variances, rtol=1e-3)


def test_trials_surer_than_their_scatter_shows_are_weighted_by_their_errors():
    rng = np.random.default_rng(3)
    temperatures, sds = np.linspace(4, 16, 9), rng.uniform(0.1, 0.5, 9)
    points = [
        trial(i, t, rng.normal(0, 0.01, 2), covariance=sd**2 * np.eye(2))
        for i, (t, sd) in enumerate(zip(temperatures, sds, strict=True))
    ]
    species = fit_species(points, name="x", reference_temperature=10.0)
    rates = [p.ln_resting_rate for p in points]
    slope, level = np.polyfit(TRUTH.inverse_temperature(temperatures), rates, 1, w=1 / sds)
    assert parameters(species)[[1, 3]] == pytest.approx([level, slope], rel=1e-5)
    assert species.provenance["temperature_response"]["scatter_sd"]["between_trials"]["ln_resting_rate"] < 0.001


# --- laws --------------------------------------------------------------------------------------------------------


def test_order_of_trials_and_names_do_not_matter():
    points = crossed(np.random.default_rng(4))
    shuffled = [points[k] for k in np.random.default_rng(5).permutation(len(points))]
    renamed = [replace(p, individual=f"x{9 - int(p.individual[1:])}") for p in points]
    species = fit_species(points, name="x")
    assert fit_species(shuffled, name="x") == species
    np.testing.assert_allclose(fit_species(renamed, name="x").covariance, species.covariance, rtol=1e-4, atol=1e-9)


@pytest.mark.parametrize("temperatures", [(5.0, 10.0, 15.0), (10.0,)], ids=["three temperatures", "one temperature"])
def test_reference_temperature_changes_no_critical_po2(temperatures):
    points = crossed(np.random.default_rng(6), temperatures=temperatures)
    near, far = (fit_species(points, name="x", reference_temperature=t) for t in (10.0, 18.0))
    wanted = np.array([4.0, 8.0, 12.0, 16.0])
    np.testing.assert_allclose(far.pcrit(wanted), near.pcrit(wanted), rtol=1e-10)
    np.testing.assert_allclose(far.log_pcrit_sd(wanted), near.log_pcrit_sd(wanted), rtol=1e-8)


def test_units_of_the_traits_shift_the_levels_only():
    points = crossed(np.random.default_rng(7))
    scaled = [replace(p, ln_supply_capacity=p.ln_supply_capacity + 2.0) for p in points]
    before, after = fit_species(points, name="x"), fit_species(scaled, name="x")
    np.testing.assert_allclose(parameters(after) - parameters(before), [2.0, 0, 0, 0], atol=1e-6)
    np.testing.assert_allclose(after.covariance, before.covariance, rtol=1e-4, atol=1e-9)


def test_individuals_that_differ_alike_make_levels_uncertain_together():
    rng = np.random.default_rng(8)
    points = [
        trial(i, t, d + rng.normal(0, 0.02, 2)) for i, d in enumerate(rng.normal(0, 0.3, 12)) for t in (5.0, 15.0)
    ]
    covariance = np.array(fit_species(points, name="x").covariance)
    assert covariance[0, 1] / np.sqrt(covariance[0, 0] * covariance[1, 1]) > 0.9
    assert fit_species(points, name="x").log_pcrit_sd(10.0) < 0.2 * np.sqrt(covariance[1, 1])


def test_trial_errors_are_carried():
    few = [
        np.sqrt(fit_species(crossed(np.random.default_rng(9), error=e), name="x").covariance[2][2]) for e in (0.02, 0.3)
    ]
    assert few[1] > 2 * few[0]


def test_coverage_of_the_intervals():
    """60 species with 9 quantities each; the full study is tests/benchmarks/response_coverage.py."""
    rng = np.random.default_rng(10)
    temperatures = np.linspace(5, 15, 5)
    truth = np.concatenate([parameters(TRUTH), np.log(TRUTH.pcrit(temperatures))])
    inside = []
    for _ in range(60):
        species = fit_species(crossed(rng), name="x", reference_temperature=10.0)
        found = np.concatenate([parameters(species), np.log(species.pcrit(temperatures))])
        deviations = [*np.sqrt(np.diag(species.covariance)), *species.log_pcrit_sd(temperatures)]
        inside.append(np.abs(found - truth) <= NORMAL_975 * np.array(deviations))
    shares = np.mean(inside, axis=0)
    assert (shares >= 0.85).all()  # binomial: 0.95 - 3.5 standard errors of 60
    assert np.mean(inside) < 1.0


# --- what is missing ---------------------------------------------------------------------------------------------


def test_never_limited_trials_give_their_rate_only():
    points = crossed(np.random.default_rng(11))
    unlimited = [
        replace(p, ln_supply_capacity=np.nan, covariance=np.array([[np.nan, np.nan], [np.nan, p.covariance[1, 1]]]))
        if k % 3 == 0 and k % 2
        else p
        for k, p in enumerate(points)
    ]
    species = fit_species(unlimited, name="x")
    assert species.provenance["temperature_response"]["trials_without_supply_capacity"] == 5
    assert np.isfinite(species.covariance).all()
    assert parameters(species) == pytest.approx(parameters(fit_species(points, name="x")), abs=0.15)
    assert species.covariance[2][2] > fit_species(points, name="x").covariance[2][2]


def test_single_temperature_takes_the_published_energies():
    """Deutsch et al. 2020: Es = 0.29 +- 0.23 eV, E0 = 0.40 +- 0.28 eV, hence 0.69 eV for the rate."""
    species = fit_species(crossed(np.random.default_rng(12), temperatures=(10.0,)), name="x")
    assert parameters(species)[2:] == pytest.approx([0.29, 0.69], rel=1e-9)
    energies = np.array(species.covariance)[2:, 2:]
    np.testing.assert_allclose(energies, [[0.23**2, 0.23**2], [0.23**2, 0.23**2 + 0.28**2]], rtol=1e-4)
    assert np.sqrt([-1, 1] @ energies @ [-1, 1]) == pytest.approx(0.28, rel=1e-4)  # E0, which alone moves Pcrit
    assert sum("published distribution" in note for note in species.provenance["notes"]) == 2
    assert species.temperature_range == (9.5, 10.5)


def test_single_temperature_carries_the_energies_to_another_reference():
    points = crossed(np.random.default_rng(13), temperatures=(10.0,))
    here, there = (fit_species(points, name="x", reference_temperature=t) for t in (10.0, 14.0))
    x = here.inverse_temperature(14.0)
    assert there.resting_rate.value == pytest.approx(here.resting_rate.value * np.exp(0.69 * x), rel=1e-8)
    variance = 0.23**2 + 0.28**2
    assert there.covariance[1][3] == pytest.approx(variance * x, rel=1e-3)
    assert there.covariance[1][1] == pytest.approx(here.covariance[1][1] + variance * x**2, rel=1e-4)


def test_single_temperature_takes_given_energies():
    points = crossed(np.random.default_rng(14), temperatures=(10.0,))
    given = {"supply_energy": (0.35, 0.05), "resting_energy": (0.60, 0.0)}
    species = fit_species(points, name="x", energies=given)
    assert parameters(species)[2:] == pytest.approx([0.35, 0.60], rel=1e-9)
    np.testing.assert_allclose(np.array(species.covariance)[2:, 2:], [[0.0025, 0], [0, 0]], atol=2e-6)  # 0.001 eV
    assert "activation energies were given" in species.provenance["notes"]


def test_supply_capacities_at_one_temperature_borrow_their_energy_only():
    points = crossed(np.random.default_rng(15))
    some = [p if p.temperature == 10.0 else replace(p, ln_supply_capacity=np.nan) for p in points]
    species = fit_species(some, name="x")
    assert species.supply_capacity.activation_energy == pytest.approx(0.29, abs=0.02)
    assert species.resting_rate.activation_energy == pytest.approx(0.62, abs=0.1)
    assert np.sqrt(species.covariance[2][2]) == pytest.approx(0.23, rel=0.05)
    assert np.sqrt(species.covariance[3][3]) < 0.1
    assert [note.split()[0] for note in species.provenance["notes"] if "published" in note] == ["supply_energy"]


@pytest.mark.parametrize(
    ("masses", "reason"),
    [
        ((1.0, 1.2, 1.4, 1.6, 1.8, 1.9), "masses of 6 individuals span a factor of 1.90"),
        ((1.0, 2.0, 3.0, 4.0, 5.0), "masses of 5 individuals span a factor of 5.00"),
        ((1.0, 2.0, 3.0, 4.0, 5.0, None), "2 of 12 have no body mass"),
        ((None,) * 6, "no trial has a body mass"),
    ],
)
def test_no_mass_exponent_without_the_masses_for_it(masses, reason):
    rng = np.random.default_rng(16)
    points = [trial(i, t, rng.normal(0, 0.1, 2), m) for i, m in enumerate(masses) for t in (5.0, 15.0)]
    species = fit_species(points, name="x")
    assert (species.supply_capacity.mass_exponent, species.resting_rate.mass_exponent) == (0.0, 0.0)
    assert f"no mass exponent: {reason}" in species.provenance["notes"]
    assert (species.body_mass is None) == (None in masses)


def test_one_individual_says_what_it_cannot_know():
    points = crossed(np.random.default_rng(17), individuals=1, temperatures=(5.0, 10.0, 15.0))
    species = fit_species(points, name="x")
    assert any("how individuals differ is unknown" in note for note in species.provenance["notes"])
    assert list(species.provenance["temperature_response"]["scatter_sd"]) == ["between_trials"]


def test_two_trials_are_enough_but_barely():
    points = crossed(np.random.default_rng(18), individuals=2, temperatures=(10.0,), error=0.0)
    species = fit_species(points, name="x")
    half = abs(points[0].ln_resting_rate - points[1].ln_resting_rate) / 2
    assert np.sqrt(species.covariance[1][1]) * NORMAL_975 == pytest.approx(student.ppf(0.975, 1) * half, rel=1e-3)


def test_provenance_is_kept_and_can_be_written(tmp_path):
    given = {"trials": ["a", "b"], "notes": ["b: few hours"]}
    species = fit_species(crossed(np.random.default_rng(19)), name="x", provenance=given)
    assert species.provenance["trials"] == ["a", "b"]
    assert species.provenance["notes"][0] == "b: few hours"
    assert given["notes"] == ["b: few hours"]
    assert species.reference_temperature == 10.0  # mean of the trials
    write_species(species, tmp_path / "x.toml")
    assert read_species(tmp_path / "x.toml") == species


# --- what is refused ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("limited", [0, 1])
def test_too_few_supply_capacities(limited):
    points = [
        p if k < limited else replace(p, ln_supply_capacity=np.nan)
        for k, p in enumerate(crossed(np.random.default_rng(20), individuals=2))
    ]
    with pytest.raises(InputError, match=rf"prawn: {limited} of 6 trials with a supply capacity; expected 2 or more"):
        fit_species(points, name="prawn")


@pytest.mark.parametrize(
    "given", [{"supply_energy": (0.3, 0.1)}, {"supply_energy": (0.3, -0.1), "resting_energy": (0.6, 0.1)}]
)
def test_incomplete_energies(given):
    with pytest.raises(InputError, match=r"x: activation energies .*0\.3.*; expected supply_energy and resting_energy"):
        fit_species(crossed(np.random.default_rng(21)), name="x", energies=given)


def test_trial_of_unknown_uncertainty():
    points = crossed(np.random.default_rng(23))
    points[4] = replace(points[4], covariance=np.full((2, 2), np.nan))
    with pytest.raises(InputError, match=r"trial '1 at 10\.0': its uncertainty is not known; leave it out"):
        fit_species(points, name="x")


def test_mass_and_temperature_that_change_together():
    plan = [(5.0, 1.0), (15.0, 3.0)] * 4
    points = [trial(i, t, mass=m) for i, (t, m) in enumerate(plan)]
    with pytest.raises(InputError, match=r"temperature and body mass change together .* leave out the masses"):
        fit_species(points, name="x")


def test_energies_beyond_any_animal():
    points = [trial(i, t, d) for i, (t, d) in enumerate([(10.0, 0.0), (10.1, 0.02), (11.2, 0.9), (11.1, 0.9)])]
    with pytest.raises(
        InputError, match=r"supply_energy came out as 5\.\d\d eV; expected -3 to 3 eV; use trials further"
    ):
        fit_species(points, name="x")


def test_mass_exponents_beyond_any_animal():
    points = [trial(i, t, 4 * np.log(m), m) for i, m in enumerate((1, 1.5, 2, 2.5, 3, 4)) for t in (5.0, 15.0)]
    with pytest.raises(InputError, match=r"mass exponents came out as 3\.80 and 3\.75; expected -2 to 2"):
        fit_species(points, name="x")


def test_reference_temperature_beyond_any_sea():
    with pytest.raises(InputError, match=r"reference temperature 283\.15 degC; expected -5 to 50 degC"):
        fit_species(crossed(np.random.default_rng(22)), name="x", reference_temperature=283.15)
