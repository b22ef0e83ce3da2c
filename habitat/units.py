"""One unit registry: headings such as ``oxygen [ml/l]``, spellings met in files, and oxygen amounts.

Oxygen is reported as an amount (umol), a mass (mg) or a gas volume (ml at 0 degC, 1 atm). All three count molecules,
so a unit is converted by what stands in its numerator. What needs the seawater itself (per-kg to per-litre,
concentration to partial pressure) is in `habitat.seawater`.
"""

import functools
import re
import unicodedata
from dataclasses import dataclass
from typing import Literal

import pint

from habitat.errors import UnitError

ZERO_CELSIUS = 273.15
"""[K]"""

OXYGEN_MOLAR_MASS = 31.9988
"""Molar mass of O2 [g/mol]."""

UMOL_PER_ML = 44.6596
"""Amount of O2 in one millilitre of the real gas at 0 degC and 1 atm [umol/ml]: 1000 / 22.3916 l/mol, as used by the
SCOR WG 142 recommendation (doi:10.13155/45915)."""

# Whole units that the registry does not know, or knows as something else (psu, mb, mm Hg), from netCDF conventions,
# hydrographic exchange files and laboratory tables. Keys are in lower case; values are the registry's grammar.
SPELLINGS = {
    "1": "dimensionless",
    "pss": "dimensionless",
    "pss-78": "dimensionless",
    "pss78": "dimensionless",
    "psu": "dimensionless",
    "practical salinity": "dimensionless",
    "practical salinity units": "dimensionless",
    "0.001": "dimensionless",  # the practical scale written as parts per thousand
    "1e-3": "dimensionless",
    "1e-03": "dimensionless",
    "ppt": "dimensionless",
    "‰": "dimensionless",
    "um": "umol/l",  # micromolar, not micrometre
    "db": "dbar",
    "dbars": "dbar",
    "mb": "mbar",
    "torr": "mmHg",
    "mmhg": "mmHg",
    "mm hg": "mmHg",
    "m": "m",  # a capital M in a depth column is no molar
    "% saturation": "percent",
    "%saturation": "percent",
    "% sat": "percent",
    "%sat": "percent",
    "percent saturation": "percent",
    "% air saturation": "percent",
    "% a.s.": "percent",
}

# Typographic variants; micro signs and superscripts are already plain letters and digits by then.
_TYPOGRAPHY = str.maketrans({"μ": "u", "−": "-", "–": "-", "⋅": "·", "{": None, "}": None})

_TEMPERATURE = re.compile(r"(?:°|deg(?:ree)?s?)?[ ._]*(c|k|f|celsius|kelvin|fahrenheit)", re.IGNORECASE)
_TEMPERATURE_NAMES = {"c": "degC", "k": "kelvin", "f": "degF"}

# Remarks on the scale or on what is measured, which do not change the unit: "ITS-90, deg C", "mg O2/l", "ml(STP)/l".
# They must follow a letter, so that "% O2", which may be a share of a gas mixture, stays unknown.
_SCALE = re.compile(r"[ ,]*\(?\bIP?TS-?(?:68|90)\b\)?[ ,]*", re.IGNORECASE)
_SUBSTANCE = re.compile(r"(?<=[a-zL])[ _]?\(?(?:[Oo]2|(?i:ntp|stpd?))(?![A-Za-z0-9])\)?")

OXYGEN_UNITS = "umol/kg, umol/l, mmol/m3, mol/m3, ml/l, mg/l, % saturation, kPa, mbar, hPa, atm or mmHg"

OxygenKind = Literal["per mass", "per volume", "saturation", "partial pressure"]


@dataclass(frozen=True)
class OxygenUnit:
    """What a unit of dissolved oxygen means.

    Attributes
    ----------
    kind : {"per mass", "per volume", "saturation", "partial pressure"}
        Which of the four ways of stating oxygen it is.
    factor : float
        Multiplies a value into umol/kg, umol/l, a fraction of saturation, or kPa respectively.
    """

    kind: OxygenKind
    factor: float


def split_heading(heading: str) -> tuple[str, str | None]:
    """Split a table heading into name and unit; the name is lower-cased, its blanks and dashes become underscores.

    Examples
    --------
    >>> split_heading("Oxygen [ml/l]")
    ('oxygen', 'ml/l')
    >>> split_heading("salinity")
    ('salinity', None)
    """
    match = re.fullmatch(r"\s*(.*?)\s*(?:\[([^\[\]]*)\])?\s*", heading)
    if match is None:
        return _plain(heading), None
    name, unit = match.groups()
    return _plain(name), unit.strip() or None if unit is not None else None


def parse_unit(text: str) -> pint.Unit:
    """Parse a unit as files spell it.

    Parameters
    ----------
    text : str
        For example ``"umol kg-1"``, ``"micromoles_per_kilogram"``, ``"UMOL/KG"``, ``"degrees_celsius"``.

    Raises
    ------
    UnitError
        The text is empty or no known unit.
    """
    spelled = _plain_spelling(text)
    if not spelled:
        raise UnitError("no unit given", remedy="state it, for example 'oxygen [umol/kg]'")
    temperature = _TEMPERATURE.fullmatch(spelled)
    if temperature:
        candidates = [_TEMPERATURE_NAMES[temperature[1][0].lower()]]
    elif spelled.lower() in SPELLINGS:
        candidates = [SPELLINGS[spelled.lower()]]
    else:
        candidates = [_grammar(spelled), _grammar(spelled.lower())]
    for candidate in candidates:
        try:
            return _registry().parse_units(candidate)
        except Exception:  # the parser raises many kinds, down to tokenizer errors
            continue
    raise UnitError(f"unit '{text}' is not known", remedy="check its spelling, for example umol/kg, ml/l, degC, dbar")


def oxygen_unit(text: str) -> OxygenUnit:
    """Interpret a unit of dissolved oxygen.

    Raises
    ------
    UnitError
        The unit is unknown, or is not one in which dissolved oxygen is stated.

    Examples
    --------
    >>> oxygen_unit("umol kg-1")
    OxygenUnit(kind='per mass', factor=1.0)
    """
    unit = parse_unit(text)
    registry = _registry()
    if unit == registry.percent or text.strip() == "1":  # other dimensionless spellings are of salinity
        return OxygenUnit("saturation", float((1 * unit).to("dimensionless").magnitude))
    if unit.is_compatible_with("kPa"):
        return OxygenUnit("partial pressure", float((1 * unit).to("kPa").magnitude))
    for kind, base in (("per mass", "umol/kg"), ("per volume", "umol/l")):
        amount = _amount(unit)
        if amount.is_compatible_with(base):
            return OxygenUnit(kind, float(amount.to(base).magnitude))
    raise UnitError(f"unit '{text}' is not one of dissolved oxygen", expected=OXYGEN_UNITS)


def factor(text: str, to: str) -> float:
    """Factor that converts values in unit `text` to unit `to`; oxygen masses and gas volumes become amounts.

    Raises
    ------
    UnitError
        The unit is unknown or of another kind than `to`.

    Examples
    --------
    >>> round(factor("mg/kg/h", "umol/g/h"), 6)
    0.031251
    """
    unit = parse_unit(text)
    target = _registry().parse_units(to)
    quantity = _amount(unit) if "[substance]" in target.dimensionality else 1 * unit
    if not quantity.is_compatible_with(target):
        raise UnitError(f"unit '{text}' cannot be converted", expected=f"a unit such as {to}")
    return float(quantity.to(target).magnitude)


def celsius(text: str) -> tuple[float, float]:
    """Factor and offset that turn temperatures in unit `text` into degC.

    Raises
    ------
    UnitError
        The unit is not one of temperature.
    """
    unit = parse_unit(text)
    registry = _registry()
    if unit == registry.degC:
        return 1.0, 0.0
    if unit == registry.kelvin:
        return 1.0, -ZERO_CELSIUS
    if unit == registry.degF:
        return 5 / 9, -160 / 9
    raise UnitError(f"unit '{text}' is not one of temperature", expected="degC, K, ITS-90 or IPTS-68")


def temperature_difference_factor(text: str) -> float:
    """Factor that turns a temperature difference in unit `text` into degC; differences are never shifted."""
    return celsius(text)[0]


def is_ipts68(text: str) -> bool:
    """Whether a temperature unit names the practical temperature scale of 1968."""
    return "68" in text


@functools.cache
def _registry() -> pint.UnitRegistry:
    return pint.UnitRegistry()


def _plain(name: str) -> str:
    return re.sub(r"[\s\-_]+", "_", name.strip().lower())


def _plain_spelling(text: str) -> str:
    """Undo what writing adds to a unit: typography, capitals, brackets, and remarks that do not change it."""
    plain = unicodedata.normalize("NFKC", text.replace("º", "°")).translate(_TYPOGRAPHY)
    plain = re.sub(r"\s+", " ", plain).strip()
    plain = re.sub(r"^[\[(]\s*([^\[\]()]*?)\s*[\])]$", r"\1", plain)
    if plain.isupper():  # capitals throughout are a habit of old tables, not mega-, gauss or henry
        plain = plain.lower()
    if _SCALE.search(plain):
        plain = _SCALE.sub("", plain) or "degC"
    return _SUBSTANCE.sub("", plain)


def _grammar(text: str) -> str:
    """Write a spelled unit in the registry's grammar."""
    text = re.sub(r"_per_|\s+per\s+", "/", text)
    text = re.sub(r"\bM(?=(?:mol|[lLg]|bar)\b)", "m", text)  # nobody means mega- before these
    text = re.sub(r"\b([kh]?)pa\b", lambda match: match[1].lower() + "Pa", text, flags=re.IGNORECASE)
    text = re.sub(r"(?<=[A-Za-z])(?:\^| (?=-))?(-?\d+)", r"**\1", text)
    return re.sub(r"(?<=[\w%]) ?[ .·] ?(?=[A-Za-z])", "*", text)


def _amount(unit: pint.Unit) -> pint.Quantity:
    """Restate a unit whose numerator is a mass or a gas volume of O2 as an amount of O2."""
    registry = _registry()
    numerator = _numerator(unit)
    if numerator == "[mass]":
        return (1 * unit) / (OXYGEN_MOLAR_MASS * registry.gram / registry.mole)
    if numerator == "[length] ** 3":
        return (1 * unit) * (UMOL_PER_ML * registry.micromole / registry.milliliter)
    return 1 * unit


def _numerator(unit: pint.Unit) -> str:
    registry = _registry()
    for name, power in unit._units.items():
        if power > 0:
            return str((registry.parse_units(name) ** power).dimensionality)
    return ""
