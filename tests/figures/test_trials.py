"""Pictures of trials: points, limits, intervals and residuals lie where the estimates and the table say."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest
from matplotlib import rcParams
from matplotlib.axes import Axes
from matplotlib.collections import PolyCollection
from scenes import LONG, PRAWN, letters, texts

from habitat import figures
from habitat.species import Species
from habitat.trials.estimate import JointEstimate, WithInterval
from habitat.trials.trial import Trial

OFFSET, CAPACITY, REST = 0.15, 1.10, 2.40  # kPa, umol/g/h/kPa, umol/g/h: hidden in the invented trials
TEMPERATURES = (4.0, 10.0, 16.0)
NOT_DRAWN = {"covariance": np.full((3, 3), np.nan), "evidence_of_limit": np.nan, "effective_draws": np.nan}


def never_limited(count: int) -> JointEstimate:
    """Estimates of a trial that oxygen never limited: only bounds of supply capacity and Pcrit are known."""
    return JointEstimate(
        limited=np.zeros(count),
        sensor_offset=WithInterval(np.nan, -np.inf, np.inf),
        supply_capacity=WithInterval(np.nan, 0.42, np.inf),
        resting_rate=WithInterval(2.41, 2.35, 2.47),
        critical_po2=WithInterval(np.nan, 0.0, 5.7),
        flags=("never-limited",),
        **NOT_DRAWN,
    )


def simulated(count=80, lowest=0.3, offset=OFFSET):
    """Invented trial of an animal at rest, PO2 falling from 20 kPa to `lowest`, and estimates near the truth."""
    rng = np.random.default_rng(7)
    po2 = np.geomspace(20.0, lowest, count)
    true_rate = np.minimum(REST, CAPACITY * po2)
    rate = true_rate + rng.normal(0.0, 0.04 * true_rate + 0.02 * REST)
    trial = Trial("P1", "prawn 1", 10.0, po2 - offset + rng.normal(0.0, 0.02, count), rate)
    result = JointEstimate(
        limited=(CAPACITY * po2 < REST).astype(float),
        sensor_offset=WithInterval(0.16, 0.09, 0.21),
        supply_capacity=WithInterval(1.08, 1.02, 1.17),
        resting_rate=WithInterval(2.41, 2.35, 2.47),
        critical_po2=WithInterval(2.23, 2.05, 2.38),
        flags=(),
        **NOT_DRAWN,
    )
    return trial, result


def envelope(trial: Trial):
    """Largest provision for each candidate correction, and where the leader changes between candidates."""
    candidates = np.linspace(max(-0.5, 0.005 - trial.po2.min()), 1.0, 200)
    provisions = trial.rate / (trial.po2 + candidates[:, None])
    changes = np.flatnonzero(np.diff(provisions.argmax(axis=1)))
    return (candidates, provisions.max(axis=1)), [(candidates[i], provisions[i].max()) for i in changes]


def drawn(trial, result, title="Prawn, trial P1"):
    return figures.trial_picture(trial, result, *envelope(trial), title=title)


def panel(figure, words: str) -> Axes:
    """The first panel whose labels say `words`."""
    return next(axes for axes in figure.axes if words in f"{axes.get_ylabel()} {axes.get_xlabel()}")


def marks(axes: Axes, marker: str):
    """x and y of all points drawn with a marker, and whether they are filled."""
    lines = [line for line in axes.lines if line.get_marker() == marker and len(line.get_xdata())]
    x, y = (np.concatenate([np.empty(0), *(get(line) for line in lines)]) for get in (_x, _y))
    return x, y, {line.get_markerfacecolor() != "none" for line in lines}


def stays_on_the_page(figure) -> bool:
    """Whether all that is drawn lies within the picture."""
    figure.draw_without_rendering()
    box = figure.get_tightbbox()  # inch
    return box.x0 >= 0 and box.y0 >= 0 and box.x1 <= figure.get_figwidth() and box.y1 <= figure.get_figheight()


def _x(line):
    return line.get_xdata()


def _y(line):
    return line.get_ydata()


def straight(axes: Axes, along: str) -> set[float]:
    """Places of the lines across a panel: `along` is "x" for vertical ones."""
    places = {"x": (_x, _y), "y": (_y, _x)}[along]
    ends = [[list(get(line)) for get in places] for line in axes.lines]
    return {float(at[0]) for at, other in ends if other == [0, 1] and at[0] == at[-1]}


def bands(axes: Axes, along: str) -> set[tuple[float, float]]:
    """Ends of the shaded intervals across a panel."""
    boxes = [patch.get_bbox() for patch in axes.patches]
    across = [box for box in boxes if ((box.y0, box.y1) if along == "x" else (box.x0, box.x1)) == (0, 1)]
    return {(box.x0, box.x1) if along == "x" else (box.y0, box.y1) for box in across}


# --- one trial ---------------------------------------------------------------------------------------------------


def test_observations_are_drawn_as_read_and_corrected_by_their_chance_of_being_limited():
    trial, result = simulated()
    chances = np.where(result.limited == 1, 0.99, 0.01)
    chances[40:44] = 0.5
    rates = panel(drawn(trial, replace(result, limited=chances)), "metabolic rate")
    as_read, corrected = ([line for line in rates.lines if len(_x(line)) == n] for n in (80, (chances < 0.05).sum()))
    np.testing.assert_array_equal(_x(as_read[0]), trial.po2)
    np.testing.assert_array_equal(_y(as_read[0]), trial.rate)
    assert as_read[0].get_markerfacecolor() == "none"
    np.testing.assert_allclose(_x(corrected[0]), trial.po2[chances < 0.05] + 0.16)
    for marker, own in (("^", chances > 0.95), ("D", chances == 0.5)):
        x, y, filled = marks(rates, marker)
        np.testing.assert_allclose(x, trial.po2[own] + 0.16)
        np.testing.assert_array_equal(y, trial.rate[own])
        assert filled == {True}


def test_chances_differ_by_more_than_colour_and_only_those_that_occur_are_named():
    trial, result = simulated()
    figure = drawn(trial, result)
    said = [text for text in texts(figure) if "chance of being limited" in text]
    assert said == ["corrected, chance of being limited at least 95 %", "corrected, chance of being limited below 5 %"]
    named = [line for line in figure.legends[0].get_lines() if line.get_marker() not in ("None", "", None)]
    looks = [(line.get_marker(), line.get_markerfacecolor() == "none") for line in named]
    assert len(looks) == len(set(looks))


def test_the_limit_the_resting_rate_and_pcrit_are_drawn_with_their_intervals():
    rates = panel(drawn(*simulated()), "metabolic rate")
    limit = next(line for line in rates.lines if len(_x(line)) == 2 and _x(line)[0] == _y(line)[0] == 0)
    assert _y(limit)[1] / _x(limit)[1] == pytest.approx(1.08)
    spread = rates.collections[0].get_paths()[0].vertices
    far = spread[spread[:, 0] == _x(limit)[1]]
    assert {round(slope, 9) for slope in far[:, 1] / far[:, 0]} == {1.02, 1.17}
    assert straight(rates, "y") == {2.41}
    assert straight(rates, "x") == {2.23}
    assert bands(rates, "y") == {(2.35, 2.47)}
    assert bands(rates, "x") == {(2.05, 2.38)}


def test_provision_is_cut_above_the_supply_capacity_and_the_picture_says_what_is_cut_off():
    trial, result = simulated(offset=0.31, lowest=0.2)
    result = replace(result, sensor_offset=WithInterval(0.30, 0.2, 0.4))
    figure = drawn(trial, result)
    provision = panel(figure, "oxygen provision")
    positive = trial.po2 > 0
    as_read = trial.rate[positive] / trial.po2[positive]
    top = provision.get_ylim()[1]
    assert 1.17 < top < 2 * 1.17
    assert (~positive).sum() > 3
    count, highest = (as_read > top).sum(), as_read.max()
    assert count > 3
    said = next(text for text in texts(figure) if "provision above the axis" in text)
    assert f"{count} as read (up to {highest:.3g})" in said
    assert f"no provision at PO₂ ≤ 0: {(~positive).sum()} as read" in said
    assert len(marks(provision, "x")[0]) == count
    assert straight(provision, "y") == {1.08}
    assert bands(provision, "y") == {(1.02, 1.17)}


def test_negative_readings_are_on_the_page():
    trial, result = simulated(offset=0.4)
    assert trial.po2.min() < 0
    assert panel(drawn(trial, result), "metabolic rate").get_xlim()[0] < trial.po2.min()


def test_nothing_is_said_to_be_cut_off_when_nothing_is():
    trial, result = simulated(offset=0.0)
    exact = replace(trial, rate=np.minimum(REST, CAPACITY * trial.po2.clip(0.25)))
    assert not any("above the axis" in text or "no provision" in text for text in texts(drawn(exact, result)))


def test_the_envelope_has_its_kinks_and_the_joint_estimate():
    trial, result = simulated()
    (candidates, provision), kinks = envelope(trial)
    figure = figures.trial_picture(trial, result, (candidates, provision), kinks, title="Prawn")
    axes = panel(figure, "candidate correction")
    curve = next(line for line in axes.lines if len(_x(line)) == len(candidates))
    np.testing.assert_array_equal(_y(curve), provision)
    x, y, _ = marks(axes, "s")
    assert len(kinks) > 1
    np.testing.assert_array_equal(np.column_stack([x, y]), kinks)
    assert straight(axes, "x") == {0.0, 0.16}
    assert bands(axes, "x") == {(0.09, 0.21)}
    assert straight(axes, "y") == {1.08}
    assert f"cut: provision up to {provision.max():.3g}" in texts(figure)
    assert axes.get_xlim() == (candidates[0], candidates[-1])


def test_an_offset_beyond_the_candidates_is_still_shown():
    trial, result = simulated()
    far = replace(result, sensor_offset=WithInterval(1.3, 1.1, 1.5), flags=("offset-implausible",))
    figure = drawn(trial, far)
    assert panel(figure, "candidate correction").get_xlim()[1] == 1.5
    assert "flags: offset-implausible" in texts(figure)


def test_the_limited_phase_has_room():
    figure = drawn(*simulated())
    near, far = figure.axes[:2]
    assert near.get_xlim()[1] == far.get_xlim()[0] == 6  # 2.5 times Pcrit, rounded up
    assert far.get_xlim()[1] > 20
    assert near.get_ylim() == far.get_ylim()
    figure.draw_without_rendering()
    assert near.bbox.width > 1.5 * far.bbox.width


def test_axes_carry_units_and_the_legend_the_estimates():
    figure = drawn(*simulated())
    found = set(texts(figure))
    assert {
        "metabolic rate [µmol/g/h]",
        "oxygen provision [µmol/g/h/kPa]",
        "largest rate/(PO₂ + c) [µmol/g/h/kPa]",
        "PO₂ [kPa]",
        "PO₂, coarser [kPa]",
        "supply capacity α = 1.08 (1.02 to 1.17) µmol/g/h/kPa",
        "resting rate = 2.41 (2.35 to 2.47) µmol/g/h",
        "Pcrit = 2.23 (2.05 to 2.38) kPa",
        "sensor offset c = 0.16 (0.09 to 0.21) kPa",
        "as read",
        "Prawn, trial P1",
    } <= found
    assert any("candidate correction c [kPa]" in text for text in found)
    assert not any("flags" in text for text in found)


def test_a_trial_that_was_never_limited_has_bounds_instead_of_estimates():
    trial, _ = simulated(lowest=6.0)
    figure = drawn(trial, never_limited(80))
    rates, provision = panel(figure, "metabolic rate"), panel(figure, "oxygen provision")
    found = texts(figure)
    assert "never limited: α is at least 0.42 µmol/g/h/kPa," in found
    assert "and Pcrit at most 5.7 kPa" in found
    assert "flags: never-limited" in found
    assert not any("corrected" in text or "sensor offset" in text or "nan" in text or "inf" in text for text in found)
    assert straight(rates, "x") == {5.7}
    assert straight(provision, "y") == {0.42}
    assert bands(rates, "x") == bands(provision, "y") == set()
    assert len(figure.axes) == 3  # no limited phase to enlarge


def test_estimates_without_interval_have_no_band():
    trial, result = simulated()
    bare = replace(
        result, sensor_offset=WithInterval(0.16, np.nan, np.nan), supply_capacity=WithInterval(1.08, np.nan, np.nan)
    )
    figure = drawn(trial, bare)
    assert bands(panel(figure, "candidate correction"), "x") == set()
    assert {"supply capacity α = 1.08 µmol/g/h/kPa", "sensor offset c = 0.16 kPa"} <= set(texts(figure))


def test_eight_observations_and_long_names_stay_on_the_page():
    trial, result = simulated(count=8)
    result = replace(result, flags=("few-observations", "short-limited-phase", "offset-implausible", "drift"))
    figure = drawn(trial, result, title=f"{LONG} {LONG}")
    assert stays_on_the_page(figure)
    said = next(text for text in texts(figure) if text.startswith("flags: "))
    assert said.replace("- ", "-") == f"flags: {'; '.join(result.flags)}"  # wrapped, perhaps at a hyphen


# --- one species and all trials ----------------------------------------------------------------------------------


def table(individuals=4, temperatures=TEMPERATURES, never=()):
    """Table of invented trials about PRAWN; the trials numbered in `never` were never limited."""
    rng = np.random.default_rng(11)
    rows = []
    for individual in range(1, individuals + 1):
        for temperature in temperatures:
            x = PRAWN.inverse_temperature(temperature)
            capacity = 1.10 * np.exp(0.30 * x + rng.normal(0.0, 0.12))
            rate = 2.40 * np.exp(0.62 * x + rng.normal(0.0, 0.15))
            offset, pcrit = rng.normal(0.0, 0.12), rate / capacity
            values = [offset, offset - 0.06, offset + 0.06, capacity, 0.9 * capacity, 1.1 * capacity]
            values += [rate, pcrit, 0.88 * pcrit, 1.12 * pcrit]
            if len(rows) in never:
                values = [np.nan, np.nan, np.nan, np.nan, 0.4 * capacity, np.nan, rate, np.nan, np.nan, 2.5 * pcrit]
            name = f"P{individual}-{temperature:g}"
            flags = "never-limited" if len(rows) in never else ""
            rows.append([name, f"prawn {individual}", temperature, 80, *values, flags])
    columns = ["trial", "individual", "temperature_degC", "n", "sensor_offset_kpa", "sensor_offset_p025"]
    columns += ["sensor_offset_p975", "supply_capacity", "supply_capacity_p025", "supply_capacity_p975"]
    columns += ["resting_rate", "critical_po2_kpa", "critical_po2_p025", "critical_po2_p975", "flags"]
    return pd.DataFrame(rows, columns=columns)


def segments(axes: Axes) -> np.ndarray:
    """Ends of all error bars of a panel, shape (bars, 2, 2); bars with missing ends are left out."""
    bars = [np.array(c.get_segments()) for c in axes.collections if hasattr(c, "get_segments")]
    ends = np.concatenate([np.empty((0, 2, 2)), *(bar.reshape(-1, 2, 2) for bar in bars)])
    return ends[np.isfinite(ends).all(axis=(1, 2))]


def test_points_of_the_arrhenius_plot_and_their_residuals():
    trials = table()
    figure = figures.species_picture(trials, PRAWN, title="Prawn")
    x = (1.0 / 283.15 - 1.0 / (trials["temperature_degC"] + 273.15)) / 8.617333262e-5
    for number, (column, value, energy) in enumerate([("supply_capacity", 1.10, 0.30), ("resting_rate", 2.40, 0.62)]):
        fit, residuals = figure.axes[2 * number : 2 * number + 2]
        at, ln, _ = marks(fit, "o")
        np.testing.assert_allclose(at, x)
        np.testing.assert_allclose(ln, np.log(trials[column]))
        np.testing.assert_allclose(marks(residuals, "o")[1], ln - np.log(value) - energy * x, atol=1e-12)
    np.testing.assert_allclose(segments(figure.axes[0])[:, 0, 1], np.log(trials["supply_capacity_p025"]))
    np.testing.assert_allclose(segments(figure.axes[0])[:, 1, 1], np.log(trials["supply_capacity_p975"]))
    residuals = marks(figure.axes[1], "o")[1]
    np.testing.assert_allclose(segments(figure.axes[1])[:, 0, 1], residuals + np.log(0.9))
    np.testing.assert_allclose(segments(figure.axes[1])[:, 1, 1], residuals + np.log(1.1))


def test_residuals_of_one_individual_are_joined():
    trials = table()
    figure = figures.species_picture(trials.sample(frac=1, random_state=3), PRAWN, title="Prawn")
    residuals = np.log(trials["resting_rate"] / 2.40) - 0.62 * PRAWN.inverse_temperature(trials["temperature_degC"])
    joined = [_y(line) for line in figure.axes[3].lines if len(_x(line)) == 3]
    np.testing.assert_allclose(joined, residuals.to_numpy().reshape(4, 3), atol=1e-12)  # cold to warm
    assert "same individual" in texts(figure)
    alone = figures.species_picture(table(3, [10.0]), PRAWN, title="Prawn")
    assert "same individual" not in texts(alone)


def test_the_fitted_lines_have_bands_from_the_covariance():
    correlated = Species(
        "Prawn",
        10.0,
        PRAWN.supply_capacity,
        PRAWN.resting_rate,
        covariance=(
            (0.004, 0.001, 0.0008, 0.0),
            (0.001, 0.006, 0.0, -0.001),
            (0.0008, 0.0, 0.0025, 0.0),
            (0.0, -0.001, 0.0, 0.003),
        ),
    )
    figure = figures.species_picture(table(), correlated, title="Prawn")
    expected = {1: (0.004, 0.0008, 0.0025), 3: (0.006, -0.001, 0.003)}
    for number, (level, cross, slope) in expected.items():
        edges = figure.axes[number].collections[0].get_paths()[0].vertices
        x, reach = edges[:, 0], np.abs(edges[:, 1])
        # 1.959964: the 97.5 % point of the standard normal distribution
        np.testing.assert_allclose(reach, 1.959964 * np.sqrt(level + 2 * cross * x + slope * x**2), rtol=1e-6)
        line = next(line for line in figure.axes[number - 1].lines if len(_x(line)) == 101)
        above = figure.axes[number - 1].collections[0].get_paths()[0].vertices
        assert above[:, 1].max() == pytest.approx(max(_y(line)) + reach[np.argmax(x)], abs=1e-9)


def test_the_arrhenius_plot_has_units_and_a_scale_of_temperature():
    figure = figures.species_picture(table(), PRAWN, title="Prawn")
    found = texts(figure)
    assert {
        "ln α [µmol/g/h/kPa]",
        "ln resting rate [µmol/g/h]",
        "inverse temperature (1/T₀ − 1/T)/kB [1/eV]",
        "temperature [°C]",
        "fit, E = 0.3 eV (α), 0.62 eV (rate)",
        "95 % of the fit",
    } <= set(found)
    assert not any("never limited" in text for text in found)
    top = figure.axes[0].child_axes[0]
    ticks = {label.get_text(): at for label, at in zip(top.get_xticklabels(), top.get_xticks(), strict=True)}
    assert ticks["10"] == 0.0  # the reference temperature
    assert ticks["15"] == pytest.approx(PRAWN.inverse_temperature(15.0))


def test_never_limited_trials_are_lower_bounds_without_residual():
    trials = table(never=(1, 5))
    figure = figures.species_picture(trials, PRAWN, title="Prawn")
    _, ln, _ = marks(figure.axes[0], "^")
    np.testing.assert_allclose(ln, np.log(trials["supply_capacity_p025"][[1, 5]]))
    assert np.isfinite(marks(figure.axes[1], "o")[1]).sum() == len(trials) - 2
    assert np.isfinite(marks(figure.axes[3], "o")[1]).sum() == len(trials)
    assert "never limited: at least" in texts(figure)


def test_without_uncertainty_the_fit_has_no_band():
    bare = Species("Prawn", 10.0, PRAWN.supply_capacity, PRAWN.resting_rate)
    figure = figures.species_picture(table(), bare, title="Prawn")
    assert not any("95 % of the fit" in text for text in texts(figure))
    assert not any(isinstance(drawn, PolyCollection) for axes in figure.axes for drawn in axes.collections)


def test_offsets_and_pcrit_of_all_trials_from_cold_to_warm():
    trials = table()
    figure = figures.offsets_picture(trials, title="Prawn")
    ordered = trials.sort_values("temperature_degC", kind="stable")
    for axes, name in zip(figure.axes, ("sensor_offset", "critical_po2"), strict=False):
        x, y, _ = marks(axes, "o")
        np.testing.assert_array_equal(x, ordered[f"{name}_kpa"])
        np.testing.assert_array_equal(y, range(12))
        np.testing.assert_array_equal(segments(axes)[:, :, 0], ordered[[f"{name}_p025", f"{name}_p975"]])
    offsets, critical = figure.axes
    assert [label.get_text() for label in offsets.get_yticklabels()] == list(ordered["trial"])
    right = critical.child_axes[0]
    assert [label.get_text() for label in right.get_yticklabels()] == ["4.0"] * 4 + ["10.0"] * 4 + ["16.0"] * 4
    assert offsets.get_ylim()[0] > offsets.get_ylim()[1]  # the coldest on top
    assert {"sensor offset [kPa]", "Pcrit [kPa]", "temperature [°C]"} <= set(texts(figure))
    assert straight(offsets, "x") == {0.0}


def test_never_limited_trials_are_upper_bounds_of_pcrit():
    trials = table(never=(1, 5))
    figure = figures.offsets_picture(trials, title="Prawn")
    x, y, _ = marks(figure.axes[1], "<")
    names = [figure.axes[0].get_yticklabels()[int(row)].get_text() for row in y]
    assert names == ["P1-10 *", "P2-16 *"]
    np.testing.assert_array_equal(x, trials["critical_po2_p975"][[1, 5]])
    found = texts(figure)
    assert found.count("not known") == 2  # their offsets
    assert {"never limited: at most", "* flagged in the table"} <= set(found)


@pytest.mark.parametrize(
    "trials",
    [
        table(1, [10.0]),
        table(1, [10.0], never=(0,)),
        table(8, [10.0], never=(2,)),
        table(20, never=(3, 40)),
        table(25),
        table().assign(trial=[f"{LONG} {i}" for i in range(12)]),
        table().assign(supply_capacity_p025=np.nan, supply_capacity_p975=np.nan, critical_po2_kpa=np.nan),
    ],
    ids=["one trial", "one never limited", "one temperature", "60 trials", "75 trials", "long names", "no intervals"],
)
def test_few_and_many_trials_stay_on_the_page(trials):
    for figure in (
        figures.species_picture(trials, PRAWN, title=LONG),
        figures.offsets_picture(trials, title=LONG),
    ):
        assert stays_on_the_page(figure)
        assert figure.get_figheight() * 25.4 < 230  # mm, a page of a journal
        fonts = {text.get_fontsize() for text in letters(figure)}
        assert fonts <= {6.0, 6.5, 7.0, 8.0}


def test_names_do_not_overlap():
    figure = figures.offsets_picture(table(20), title="Prawn")
    figure.draw_without_rendering()
    boxes = [label.get_window_extent() for label in figure.axes[0].get_yticklabels()]
    assert len(boxes) == 60
    assert all(above.y0 >= below.y1 - 0.5 for above, below in pairwise(boxes))  # pixels


# --- files -------------------------------------------------------------------------------------------------------


def pictures():
    trial, result = simulated()
    yield drawn(trial, result)
    yield figures.species_picture(table(), PRAWN, title="Prawn")
    yield figures.offsets_picture(table(never=(1,)), title="Prawn")


def test_pictures_are_a_column_wide_and_the_same_in_every_run(tmp_path):
    before = dict(rcParams)
    for one, other in zip(pictures(), pictures(), strict=True):
        assert one.get_figwidth() * 25.4 == pytest.approx(90)  # mm
        first, second = (figures.save(figure, tmp_path / name) for figure, name in ((one, "first"), (other, "second")))
        for path, twin in zip(first, second, strict=True):
            assert path.read_bytes() == twin.read_bytes()
        assert {text.get_fontsize() for text in letters(one)} <= {6.0, 6.5, 7.0, 8.0}
        assert stays_on_the_page(one)
    assert dict(rcParams) == before
