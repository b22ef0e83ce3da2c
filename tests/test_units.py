"""Headings, spellings of units, and oxygen amounts."""

import re
from contextlib import suppress

import pytest
from hypothesis import given
from hypothesis import strategies as st

from habitat import units
from habitat.errors import UnitError
from habitat.units import OxygenUnit, factor, oxygen_unit, parse_unit, split_heading

# --- headings ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("heading", "expected"),
    [
        ("depth [m]", ("depth", "m")),
        ("  Oxygen   [ ml/l ] ", ("oxygen", "ml/l")),
        ("Seabed-Depth[m]", ("seabed_depth", "m")),
        ("body  mass [g]", ("body_mass", "g")),
        ("temperature [ITS-90, deg C]", ("temperature", "ITS-90, deg C")),
        ("oxygen\n[ml/l]", ("oxygen", "ml/l")),
        ("salinity", ("salinity", None)),
        ("salinity []", ("salinity", None)),
        ("po2 (kPa)", ("po2_(kpa)", None)),  # only square brackets hold a unit
        ("a [b] c", ("a_[b]_c", None)),
        ("", ("", None)),
    ],
)
def test_split_heading(heading, expected):
    assert split_heading(heading) == expected


names = st.from_regex(r"[a-z][a-z0-9]*(_[a-z0-9]+)*", fullmatch=True)
inner_units = st.text(st.characters(exclude_characters="[]", exclude_categories=["C", "Z"]), min_size=1)
blanks = st.sampled_from(["", " ", "  ", "\t"])


@given(name=names, unit=inner_units, before=blanks, between=blanks, after=blanks)
def test_split_heading_gives_back_what_was_joined(name, unit, before, between, after):
    assert split_heading(f"{before}{name.upper()}{between}[{unit}]{after}") == (name, unit)


@given(name=names)
def test_split_heading_of_a_split_name_changes_nothing(name):
    assert split_heading(name) == (name, None)


# --- spellings ---------------------------------------------------------------------------------------------------

# Meaning in the registry's own grammar, and the ways in which files and laboratory tables spell it
MEANINGS = {
    "umol/kg": """umol/kg|umol kg-1|umol kg^-1|umol kg**-1|umol kg -1|umol.kg-1|umol·kg-1|umol kg⁻¹|umol kg−1
        |umol kg^{-1}|UMOL/KG|Umol/Kg|μmol/kg|µmol/kg|μmol kg⁻¹|micromol/kg|micromol kg^-1|micromole/kg|micromoles/kg
        |umole/kg|micromoles_per_kilogram|micromoles per kilogram|micromole per kg|umol / kg|[umol/kg]|(umol/kg)
        |[ umol/kg ]|umol O2 kg-1|umol O2/kg|umolO2/kg|umol(O2)/kg|umol (O2) kg-1|umol_O2/kg|µmol O₂ kg⁻¹|UMOL O2/KG""",
    "umol/l": "umol/l|umol L-1|μmol/L|µmol L⁻¹|UMOL/L|micromol l^-1|uM|µM|UM|micromolar|umol per litre",
    "mmol/m**3": """mmol/m3|mmol m-3|mmol m**-3|mmol/m^3|mmol m^-3|mmol m^{-3}|mmol.m-3|mmol m⁻³|mmol/m³|Mmol m-3
        |MMOL/M3""",
    "mol/m**3": "mol m-3|mol/m3|mol m**-3|mol O2 m-3|moles/m3",
    "mol/kg": "mol kg-1|mol/kg",
    "nmol/l": "nmol/l|nmol L-1|nM",
    "mmol/l": "mM|mmol/l",
    "ml/l": """ml/l|mL/L|ML/L|Ml/l|ml l-1|mL L^-1|ml.l-1|mL·L⁻¹|ML L-1|milliliters per liter|millilitre per litre
        |ml(NTP)/l|ml (NTP)/l|ml(STP)/l|ml STPD/l|ml O2/l|mlO2/l|ml(O2)/L""",
    "mg/l": "mg/l|mg/L|MG/L|Mg/l|MG L-1|Mg L-1|mg l-1|mg O2/l|mg O2/L|mg O2 L-1|mgO2/L|mg(O2)/l|mg O₂ L⁻¹",
    "percent": "%|% sat|%sat|% saturation|%saturation|percent|percent saturation|% air saturation|% a.s.|% A.S.",
    "kPa": "kPa|KPA|kpa|Kpa|kPa O2",
    "hPa": "hPa|HPA|hpa",
    "Pa": "Pa|PA|pa",
    "mbar": "mbar|mBar|MBAR|Mbar|mb|millibar|millibars",
    "atm": "atm|ATM|Atm|standard_atmosphere",
    "mmHg": "mmHg|MMHG|mm Hg|Torr|torr|TORR",
    "dbar": "dbar|DBAR|dbars|db|decibar|decibars",
    "degC": """degC|DEGC|deg C|DEG C|deg_C|Deg.C|deg. C|°C|º C|ºC|℃|C|celsius|Celsius|degree C|degree_C|degrees C
        |degrees_C|degree_Celsius|degrees_celsius|degrees Celsius|[deg C]|ITS-90|ITS90|its-90|IPTS-68|IPTS68|ITS-68
        |ITS-90, deg C|IPTS-68, deg C|deg C (ITS-90)|degC (IPTS-68)|(ITS-90)""",
    "kelvin": "K|k|kelvin|Kelvin|degK|deg_K|degree_K|degrees_K",
    "degF": "degF|deg F|°F|F|fahrenheit|degrees_fahrenheit",
    "dimensionless": """1|PSS-78|PSS78|pss|PSU|psu|(psu)|practical salinity|Practical Salinity Units|0.001|1e-3|1E-3
        |1e-03|ppt|‰""",
    "g/kg": "g/kg|g kg-1|g kg^-1|G/KG",
    "m": "m|M|meter|meters|metre|metres|METERS",
    "umol/g/h": """umol/g/h|umol g-1 h-1|umol g^-1 h^-1|umol g⁻¹ h⁻¹|µmol/g/h|UMOL/G/H|umol/(g h)|umol/(g*h)|umol/h/g
        |umol/g/hr|umol/g/hour|umol g-1 hr-1|umol O2 g-1 h-1|umol O2/g/h""",
    "mg/kg/h": "mg/kg/h|mg kg-1 h-1|MG/KG/H|mg O2/kg/h|mg O2 kg-1 h-1|mgO2/kg/h",
    "mg/g/h": "mg/g/h|MG/G/H",  # not megagauss per gauss and henry
    "ml/g/h": "ml/g/h|ml g-1 h-1|ml O2 g-1 h-1|mL O2/g/h",
    "nmol/g/min": "nmol/g/min|nmol g-1 min-1|nmol O2 g⁻¹ min⁻¹",
    "umol/g/h/kPa": "umol/g/h/kPa|umol g-1 h-1 kPa-1|umol/g/h/Kpa|UMOL/G/H/KPA|umol O2 g-1 h-1 kPa-1",
    "umol/g/h/Pa": "umol/g/h/Pa|umol/g/h/pa",  # not per picoyear
    "cm**3/dm**3": "cm3/dm3|cm³/dm³",
    "megapascal": "MPa",
}
SPELLED = [(text.strip(), meaning) for meaning, texts in MEANINGS.items() for text in texts.split("|")]


@pytest.mark.parametrize(("text", "meaning"), SPELLED)
def test_spelling(text, meaning):
    expected = (1 * units._registry().parse_units(meaning)).to_base_units()
    found = (1 * parse_unit(text)).to_base_units()
    assert found.units == expected.units
    assert found.magnitude == pytest.approx(expected.magnitude, rel=1e-12)


def test_every_tabled_spelling_is_tested_and_reachable():
    tested = {text.lower() for text, _ in SPELLED}
    assert set(units.SPELLINGS) - tested == set()
    for spelling in units.SPELLINGS:
        assert units._plain_spelling(spelling).lower() == spelling
        assert units._TEMPERATURE.fullmatch(spelling) is None


# Spellings met in ocean files that the unit registry by itself does not read, or reads wrongly
@pytest.mark.parametrize(
    "text",
    [
        "micromoles_per_kilogram",
        "umol kg-1",
        "mol m-3",
        "UMOL/KG",
        "degrees_celsius",
        "PSS-78",
        "ITS-90",
        "psu",
        "0.001",
    ],
)
def test_spellings_beyond_the_registry(text):
    parse_unit(text)
    with pytest.raises(Exception, match=r".+"):
        units._registry().parse_units(text)


@pytest.mark.parametrize("text", ["", "  ", "[]", "[ ]", "( )"])
def test_an_absent_unit_is_asked_for(text):
    with pytest.raises(UnitError, match=r"no unit given; state it, for example 'oxygen \[umol/kg\]'"):
        parse_unit(text)


@pytest.mark.parametrize(
    "text",
    [
        "bananas",
        "umol/kgg",
        "umol/kg/",
        "2 umol/kg",
        "umol/100g/h",
        "umol/ind/h",
        "mg CO2/l",
        "% O2",
        "//",
        "*",
        "def",
    ],
)
def test_an_unknown_unit_is_named_with_a_remedy(text):
    message = f"unit '{text}' is not known; check its spelling, for example umol/kg, ml/l, degC, dbar"
    with pytest.raises(UnitError, match=f"^{re.escape(message)}$"):
        parse_unit(text)


@given(text=st.text(max_size=12))
def test_any_text_is_a_unit_or_a_unit_error(text):
    with suppress(UnitError):
        assert parse_unit(text) == parse_unit(f" {text} ")


# --- oxygen ------------------------------------------------------------------------------------------------------


# M(O2) = 31.9988 g/mol; 44.6596 umol/ml (1000 / 22.3916 l/mol, real gas); 1 mmHg = 0.133322 kPa; 1 atm = 101.325 kPa
@pytest.mark.parametrize(
    ("text", "kind", "expected"),
    [
        ("umol/kg", "per mass", 1.0),
        ("mol kg-1", "per mass", 1e6),
        ("ml/kg", "per mass", 44.6596),
        ("mg/kg", "per mass", 1e3 / 31.9988),
        ("umol/l", "per volume", 1.0),
        ("mmol m-3", "per volume", 1.0),
        ("mol m-3", "per volume", 1e3),
        ("ml/l", "per volume", 44.6596),
        ("cm3/dm3", "per volume", 44.6596),
        ("mg/l", "per volume", 1e3 / 31.9988),
        ("g m-3", "per volume", 1e3 / 31.9988),
        ("kg m-3", "per volume", 1e6 / 31.9988),
        ("%", "saturation", 0.01),
        ("1", "saturation", 1.0),
        ("kPa", "partial pressure", 1.0),
        ("Pa", "partial pressure", 1e-3),
        ("hPa", "partial pressure", 0.1),
        ("mbar", "partial pressure", 0.1),
        ("atm", "partial pressure", 101.325),
        ("mmHg", "partial pressure", 0.133322),
    ],
)
def test_oxygen_unit(text, kind, expected):
    meaning = oxygen_unit(text)
    assert meaning.kind == kind
    assert meaning.factor == pytest.approx(expected, rel=5e-6)  # the digits of 0.133322


def test_oxygen_unit_is_a_plain_frozen_value():
    assert oxygen_unit("umol kg-1") == OxygenUnit("per mass", 1.0)
    assert isinstance(oxygen_unit("mg/l").factor, float)


# 0.001 and psu are dimensionless like a saturation, but belong to salinity; ppm means mass or volume or amount
@pytest.mark.parametrize("text", ["degC", "m", "umol", "umol/g/h", "psu", "0.001", "ppm", "MG CO2/L", "umol/kg/kPa"])
def test_units_of_other_things_are_no_oxygen_units(text):
    with pytest.raises(UnitError, match=rf"unit '{text}' is not one of dissolved oxygen; expected umol/kg, .* or mmHg"):
        oxygen_unit(text)


@pytest.mark.parametrize(
    ("text", "to", "expected"),
    [
        ("mg/kg/h", "umol/g/h", 1.0 / 31.9988),
        ("mg/g/h", "umol/g/h", 1e3 / 31.9988),
        ("ml/g/h", "umol/g/h", 44.6596),
        ("ul/g/h", "umol/g/h", 44.6596e-3),
        ("umol g-1 h-1", "umol/g/h", 1.0),
        ("nmol/g/min", "umol/g/h", 0.06),
        ("mmol/kg/day", "umol/g/h", 1.0 / 24.0),
        ("mg O2 kg-1 h-1 kPa-1", "umol/g/h/kPa", 1.0 / 31.9988),
        ("umol/g/h/mbar", "umol/g/h/kPa", 10.0),
        ("mg/l/h", "umol/l/h", 1e3 / 31.9988),
        ("feet", "m", 0.3048),
        ("kPa", "dbar", 0.1),
        ("min", "h", 1.0 / 60.0),
        ("mg", "g", 1e-3),  # a mass stays a mass where a mass is asked for
    ],
)
def test_factor(text, to, expected):
    assert factor(text, to) == pytest.approx(expected, rel=1e-12)


def test_factor_refuses_another_kind():
    with pytest.raises(UnitError, match=r"unit 'm' cannot be converted; expected a unit such as umol/g/h"):
        factor("m", "umol/g/h")
    with pytest.raises(UnitError, match=r"unit 'bananas' is not known"):
        factor("bananas", "m")


# --- temperature -------------------------------------------------------------------------------------------------


# Fixed points of water, and -40, at which Celsius and Fahrenheit meet
@pytest.mark.parametrize(
    ("text", "value", "expected"),
    [
        ("degC", 12.5, 12.5),
        ("ITS-90", 12.5, 12.5),
        ("K", 273.15, 0.0),
        ("kelvin", 373.15, 100.0),
        ("degF", 32.0, 0.0),
        ("degF", 212.0, 100.0),
        ("°F", -40.0, -40.0),
    ],
)
def test_celsius(text, value, expected):
    scale, offset = units.celsius(text)
    assert scale * value + offset == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize(("text", "expected"), [("degC", 1.0), ("K", 1.0), ("degF", 5.0 / 9.0)])
def test_a_temperature_difference_is_scaled_but_never_shifted(text, expected):
    assert units.temperature_difference_factor(text) == expected


@pytest.mark.parametrize("convert", [units.celsius, units.temperature_difference_factor])
def test_temperature_refuses_another_kind(convert):
    with pytest.raises(UnitError, match=r"unit 'dbar' is not one of temperature; expected degC, K, ITS-90 or IPTS-68"):
        convert("dbar")


def test_only_the_scale_of_1968_is_ipts68():
    for text in ("IPTS-68", "ITS-68", "ipts68", "IPTS-68, deg C", "deg C (IPTS-68)"):
        assert units.is_ipts68(text)
    for text in ("ITS-90", "degC", "K"):
        assert not units.is_ipts68(text)
