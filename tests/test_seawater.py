"""Oxygen in seawater: published numbers, traps of the solubility formula, the TEOS-10 check casts."""

import inspect
import re
import tomllib
from pathlib import Path

import gsw
import numpy as np
import pytest

from habitat import units
from habitat.seawater import (
    absolute_salinity,
    air_saturated_po2,
    capacitance,
    concentration_at_saturation,
    depth_from_pressure,
    hydrostatic_factor,
    its90_from_ipts68,
    po2_from,
    po2_from_concentration,
    potential_density,
    potential_temperature,
    practical_salinity_from_absolute,
    pressure_from_depth,
    solubility,
    solubility_per_volume,
    temperature_from_conservative,
    temperature_from_potential,
    water_vapour_pressure,
)

# --- published numbers -------------------------------------------------------------------------------------------

CHECKS = {
    check["name"]: check
    for check in tomllib.loads(Path(__file__).with_name("published_checks.toml").read_text("utf-8"))["check"]
}


def solubility_mass(temperature, salinity):
    """Oxygen at equilibrium with moist air [mg/l]."""
    return solubility_per_volume(temperature, salinity) / units.factor("mg/l", "umol/l")


def po2_by_volume(oxygen, t, salinity, pressure):
    """PO2 [kPa] from umol/l as code written for IPTS-68 has it: converted in the solubility, as it is elsewhere."""
    saturation = oxygen / solubility_per_volume(its90_from_ipts68(t), salinity)
    return saturation * air_saturated_po2(t, salinity) * hydrostatic_factor(t, pressure)


def solubility_slope(t, salinity):
    """Relative change of solubility with temperature [%/K], by a central difference."""
    return 100.0 * np.log(solubility(t + 0.01, salinity) / solubility(t - 0.01, salinity)) / 0.02


# How each entry of published_checks.toml is obtained here; keys match whole names, arguments are the entry's inputs.
ROUTES = {
    "o2sol_gg92_bk_umolkg": lambda t68, SP: solubility(its90_from_ipts68(t68), SP),
    "o2sol_gg92_bk_mll": lambda t68, SP: solubility_per_volume(its90_from_ipts68(t68), SP) / units.UMOL_PER_ML,
    "o2sol_gg92_bk_molm3": lambda t, SP: solubility_per_volume(its90_from_ipts68(t), SP) / 1000.0,
    "o2sol_bk84_eq31_umolkg": lambda t, SP: solubility(its90_from_ipts68(t), SP),
    "o2sol_gsw_.*|o2sol_teos10_doc_.*": lambda pt90, SP: solubility(pt90, SP),
    "teos10_cast_O2sol_.*": lambda SP, t90, p_dbar, lon, lat: concentration_at_saturation(t90, SP, p_dbar, lon, lat),
    "teos10_cast_pt0_.*": lambda SP, t90, p_dbar, lon, lat: potential_temperature(t90, SP, p_dbar, lon, lat),
    "teos10_cast_z_.*|z_teos10_doc_.*|depth_teos10": lambda p_dbar, lat: -depth_from_pressure(p_dbar, lat),
    "depth_unesco1983|depth_saunders1981_inverse": depth_from_pressure,
    "pressure_saunders1981": pressure_from_depth,
    "freshwater_do_.*": lambda t, SP, atm: atm * solubility_mass(its90_from_ipts68(t), SP),
    "seawater_do_bk84_.*": lambda t, SP: solubility_mass(its90_from_ipts68(t), SP),
    "ph2o_wp80_.*": lambda t, SP: 10.0 * water_vapour_pressure(t, SP),
    "ph2o_salinity_lowering_S35": lambda SP: 1.0 - water_vapour_pressure(15.0, SP) / water_vapour_pressure(15.0, 0.0),
    "po2_air_saturation_.*": lambda t, SP, atm_mbar: air_saturated_po2(t, SP) * atm_mbar / 1013.25,
    "o2_capacitance_.*": lambda t, SP: solubility_per_volume(its90_from_ipts68(t), SP) / air_saturated_po2(t, SP),
    "po2_from_umolL_.*": lambda o2_umol_per_l, t, SP, p_dbar: 10.0 * po2_by_volume(o2_umol_per_l, t, SP, p_dbar),
    "po2_from_umolkg_.*": lambda o2_umol_per_kg, SP, t90, p_dbar, lon, lat: po2_by_volume(
        o2_umol_per_kg * potential_density(t90, SP, p_dbar, lon, lat) / 1000.0, t90, SP, p_dbar
    ),
    "hydrostatic_factor_.*": lambda t, p_dbar: hydrostatic_factor(t, p_dbar),
    "hydrostatic_percent_.*": lambda t, p_dbar: 100.0 * (hydrostatic_factor(t, p_dbar) - 1.0),
    "mg_per_l_to_umol_per_l": lambda mg_per_l: mg_per_l * units.factor("mg/l", "umol/l"),
    "mg_per_l_to_ml_per_l": lambda mg_per_l: mg_per_l * units.factor("mg/l", "umol/l") / units.factor("ml/l", "umol/l"),
    "ml_to_umol": lambda ml: ml * units.factor("ml", "umol"),
    "threshold_.*": lambda o2_umol_per_kg, SP, t, rho: po2_by_volume(o2_umol_per_kg * rho, t, SP, 0.0),
    "solubility_change_.*": lambda pt1, pt2, SP: solubility(pt2, SP) - solubility(pt1, SP),
    "dlnsat_dT_10C": lambda t, SP: solubility_slope(t, SP),
}

# Entries that rest on another formula than ours: how far apart the two formulas are, relative to the value.
OTHER_FORMULAS = {
    # Garcia & Gordon 1992 follows Benson & Krause 1984 eq. 32 within 0.013 % from 0 to 25 degC, 0.017 % at 30 degC
    "seawater_do_bk84_(0|10|20)C_S35": 1.35e-4,
    "seawater_do_bk84_30C_S35": 1.8e-4,
    # UNESCO 1983 is 1.08 m from TEOS-10 at 10000 dbar: 9712.653 m against 9713.735 m
    "depth_unesco1983": 1.2e-4,
    # Saunders 1981, quadratic in pressure, is 7 m from TEOS-10 at 10000 dbar: 9706.675 m against 9713.735 m
    ".*_saunders1981.*": 7.3e-4,
}


def the_only(table, name):
    matching = [value for pattern, value in table.items() if re.fullmatch(pattern, name)]
    assert len(matching) == 1, f"{name} has {len(matching)} entries instead of one"
    return matching[0]


def on_route(check):
    route, inputs = the_only(ROUTES, check["name"]), check["inputs"]
    named = all(name in inspect.signature(route).parameters for name in inputs)
    return route(**inputs) if named else route(*inputs.values())


def test_every_published_number_has_a_route_and_every_route_a_number():
    for name in CHECKS:
        the_only(ROUTES, name)
    for pattern in (*ROUTES, *OTHER_FORMULAS):
        assert any(re.fullmatch(pattern, name) for name in CHECKS), f"no published number for {pattern}"
    for check in CHECKS.values():
        assert set(check) == {"name", "inputs", "expected", "tolerance", "units", "source", "how"}
        assert check["how"] in ("read", "memory", "computed")


@pytest.mark.parametrize("name", CHECKS)
def test_published_number(name):
    check = CHECKS[name]
    other = [relative for pattern, relative in OTHER_FORMULAS.items() if re.fullmatch(pattern, name)]
    tolerance = other[0] * abs(check["expected"]) if other else check["tolerance"]
    assert abs(on_route(check) - check["expected"]) <= tolerance, check["source"]


@pytest.mark.parametrize("name", [name for name in CHECKS if name.startswith("po2_from_umol")])
def test_pinned_route_agrees_with_the_published_one(name):
    """0.014 % between the per-kilogram and per-litre solubilities and 0.01 % from the temperature scale."""
    inputs = dict(CHECKS[name]["inputs"])
    if "o2_umol_per_l" in inputs:
        water = inputs["t"], inputs["SP"], inputs["p_dbar"]
        po2 = 10.0 * po2_from(inputs["o2_umol_per_l"], *water, unit="umol/l")  # mbar
    else:
        po2 = po2_from_concentration(inputs["o2_umol_per_kg"], inputs["t90"], inputs["SP"], inputs["p_dbar"])
    assert po2 == pytest.approx(CHECKS[name]["expected"], rel=2e-4)


def test_capacitance_takes_its90():
    """The published capacitances take t on either scale in turn; the scales differ by 0.01 % of solubility at most."""
    for name in [name for name in CHECKS if name.startswith("o2_capacitance")]:
        inputs = CHECKS[name]["inputs"]
        assert capacitance(inputs["t"], inputs["SP"]) == pytest.approx(CHECKS[name]["expected"], rel=1.2e-4)


# --- traps of the solubility formula -----------------------------------------------------------------------------


# Garcia & Gordon 1992, Benson & Krause ml/l set, evaluated from the table; a widespread copy with B2 = -1.03410e-3
# gives 8.03015 and 4.74985, and cannot be told apart at the classic check point of 10 degC.
@pytest.mark.parametrize(("t68", "expected"), [(0.0, 8.01012), (25.0, 4.73799)])
def test_exponent_of_b2(t68, expected):
    assert solubility_per_volume(its90_from_ipts68(t68), 35.0) / units.UMOL_PER_ML == pytest.approx(expected, abs=5e-6)


def test_misprinted_term_is_left_out():
    """With the extra A3*Ts**2 of the first printing (erratum: Limnol. Oceanogr. 38:656) it is 6.3243 and 275.039."""
    temperature = its90_from_ipts68(10.0)
    assert solubility_per_volume(temperature, 35.0) / units.UMOL_PER_ML == pytest.approx(6.31477, abs=5e-6)
    assert solubility(temperature, 35.0) == pytest.approx(274.60983, abs=5e-6)


def test_the_two_solubility_sets_agree_through_density():
    """Two fits to one set of data: 0.014 % apart at most for 0 to 40 degC at S 35."""
    temperature = np.linspace(0.0, 40.0, 81)
    by_mass = solubility(temperature, 35.0) * potential_density(temperature, 35.0, 0.0) / 1000.0
    np.testing.assert_allclose(solubility_per_volume(temperature, 35.0), by_mass, rtol=1.45e-4)


# --- TEOS-10 check casts -----------------------------------------------------------------------------------------

# SP, t90, p -> SA, pt0, CT, O2sol, z of check cast 1 (142 E, 11 N) of the TEOS-10 toolbox, version 3.0
CHECK_CAST = """
34.306287392600 27.962   0 34.468236430491 27.962         27.996436412058 197.843735907350     0
34.532505000118  4.9176  909 34.705236854353  4.842769286438  4.841880414838 309.575681657104  -901.857264297281
34.679094838300  1.4837 3812 34.859091956438  1.184854886407  1.185123313980 338.302887126459 -3756.583472100749
"""


def test_levels_of_a_teos10_check_cast():
    levels = np.array([line.split() for line in CHECK_CAST.split("\n") if line], dtype=float)
    salinity, temperature, pressure, absolute, potential, conservative, saturation, height = levels.T
    place = salinity, pressure, 142.0, 11.0
    np.testing.assert_allclose(absolute_salinity(*place), absolute, atol=1e-9)
    np.testing.assert_allclose(practical_salinity_from_absolute(absolute, *place[1:]), salinity, atol=1e-9)
    np.testing.assert_allclose(potential_temperature(temperature, *place), potential, atol=1e-9)
    np.testing.assert_allclose(temperature_from_potential(potential, *place), temperature, atol=1e-9)
    np.testing.assert_allclose(temperature_from_conservative(conservative, *place), temperature, atol=1e-9)
    np.testing.assert_allclose(concentration_at_saturation(temperature, *place), saturation, atol=1e-8)
    np.testing.assert_allclose(depth_from_pressure(pressure, 11.0), -height, atol=1e-6)


def test_all_teos10_check_casts():
    """Every level of the three casts that gsw ships, each within the accuracy published beside it (its ``_ca``)."""
    file = Path(gsw.__file__).parent / "tests" / "gsw_cv_v3_0.npz"
    if not file.is_file():
        pytest.skip("this build of gsw ships no check values")
    cast = np.load(file)
    salinity, temperature, pressure = (cast[f"{name}_chck_cast"] for name in ("SP", "t", "p"))
    place = salinity, pressure, cast["long_chck_cast"], cast["lat_chck_cast"]
    for result, expected, accuracy in [
        (absolute_salinity(*place), cast["SA_from_SP"], "SA_from_SP_ca"),
        (practical_salinity_from_absolute(cast["SA_from_SP"], *place[1:]), salinity, "SP_from_SA_ca"),
        (potential_temperature(temperature, *place), cast["pt0_from_t"], "pt0_from_t_ca"),
        (temperature_from_potential(cast["pt0_from_t"], *place), temperature, "pt_from_t_ca"),
        (temperature_from_conservative(cast["CT_from_t"], *place), temperature, "t_from_CT_ca"),
        (potential_density(temperature, *place) - 1000.0, cast["sigma0"], "sigma0_ca"),
        (solubility(cast["pt0_from_t"], salinity), cast["O2sol_SP_pt"], "O2sol_SP_pt_ca"),
        (concentration_at_saturation(temperature, *place), cast["O2sol_SP_pt"], "O2sol_SP_pt_ca"),
        (-depth_from_pressure(pressure, place[3]), cast["z_from_p"], "z_from_p_ca"),
        (pressure_from_depth(-cast["z_from_p"], place[3]), cast["p_from_z"], "p_from_z_ca"),
    ]:
        assert np.isfinite(expected).sum() > 90
        np.testing.assert_allclose(result, expected, rtol=0, atol=cast[accuracy], err_msg=accuracy)
