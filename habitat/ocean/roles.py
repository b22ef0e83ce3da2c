"""Which column of a table, or variable of a netCDF file, plays which part in a water column."""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from habitat.errors import InputError
from habitat.files import nearest

WATER = ("temperature", "salinity", "oxygen")
VERTICAL = ("depth", "pressure")
ROLES = (*WATER, *VERTICAL, "latitude", "longitude", "time", "seabed_depth", "cast")

# Names as `units.split_heading` leaves them: lower case, blanks and dashes made underscores.
NAMES: dict[str, tuple[str, ...]] = {
    "temperature": (
        *("temperature", "temp", "t_an", "sea_water_temperature", "in_situ_temperature", "to"),
        *("potential_temperature", "sea_water_potential_temperature", "thetao", "theta", "ptemp", "pottemp"),
        *("conservative_temperature", "sea_water_conservative_temperature", "bigthetao"),
    ),
    "salinity": (
        *("salinity", "practical_salinity", "sea_water_salinity", "sea_water_practical_salinity"),
        *("so", "s_an", "sal", "salt", "psal", "absolute_salinity", "sea_water_absolute_salinity"),
    ),
    "oxygen": ("oxygen", "dissolved_oxygen", "o2", "o_an", "doxy", "oxy", "dissolved_oxygen_concentration"),
    "depth": ("depth", "lev", "level", "olevel", "deptht", "z", "depth_below_sea", "depth_below_sea_level"),
    "pressure": ("pressure", "pres", "press", "sea_water_pressure", "sea_pressure"),
    "latitude": ("latitude", "lat", "nav_lat"),
    "longitude": ("longitude", "lon", "long", "nav_lon"),
    "time": ("time", "date", "datetime", "date_time"),
    "seabed_depth": (
        *("seabed_depth", "sea_floor_depth", "bottom_depth", "seafloor_depth", "water_depth", "bathymetry", "deptho"),
        *("sea_floor_depth_below_geoid", "sea_floor_depth_below_sea_surface"),
    ),
    "cast": ("station", "cast", "profile"),
}

# CF standard names (table v82), in order of preference: a later group counts only when an earlier one is absent.
STANDARD_NAMES: dict[str, tuple[tuple[str, ...], ...]] = {
    "temperature": (
        ("sea_water_temperature", "sea_water_potential_temperature", "sea_water_conservative_temperature"),
    ),
    "salinity": (("sea_water_salinity", "sea_water_practical_salinity", "sea_water_absolute_salinity"),),
    "oxygen": (
        (
            "mole_concentration_of_dissolved_molecular_oxygen_in_sea_water",
            "moles_of_oxygen_per_unit_mass_in_sea_water",
            "mass_concentration_of_oxygen_in_sea_water",
            "volume_mixing_ratio_of_oxygen_at_stp_in_sea_water",
            "volume_fraction_of_oxygen_in_sea_water",
        ),
        ("fractional_saturation_of_oxygen_in_sea_water",),
    ),
    "depth": (("depth",),),
    "pressure": (("sea_water_pressure", "sea_water_pressure_due_to_sea_water"),),
    "latitude": (("latitude",),),
    "longitude": (("longitude",),),
    "time": (("time",),),
    "seabed_depth": (
        (
            "sea_floor_depth_below_geoid",
            "sea_floor_depth_below_mean_sea_level",
            "sea_floor_depth_below_sea_surface",
            "sea_floor_depth",
        ),
    ),
    "cast": (),
}

OXYGEN_KIND_OF_STANDARD_NAME = {
    "mole_concentration_of_dissolved_molecular_oxygen_in_sea_water": "per volume",
    "mass_concentration_of_oxygen_in_sea_water": "per volume",
    "volume_mixing_ratio_of_oxygen_at_stp_in_sea_water": "per volume",
    "volume_fraction_of_oxygen_in_sea_water": "per volume",
    "moles_of_oxygen_per_unit_mass_in_sea_water": "per mass",
    "fractional_saturation_of_oxygen_in_sea_water": "saturation",
}

# Endings of statistics that stand beside an analysed mean `_an` and share its standard name.
_STATISTICS = ("_sd", "_se", "_dd", "_mn", "_oa", "_ma", "_gp")
_NOT_DATA = ("_qc", "_flag", "_flag_w", "_error", "_bnds", "_bounds")


def check_choice(choose: Mapping[str, str] | None) -> dict[str, str]:
    """Check that the parts named in `choose` are parts that this program knows.

    Raises
    ------
    InputError
        A key is not one of `ROLES`.
    """
    for role in choose or {}:
        if role not in ROLES:
            raise InputError(f"'{role}' is not a part of a water column", where="choose", remedy=nearest(role, ROLES))
    return dict(choose or {})


def single(role: str, candidates: Sequence[str], where: str) -> str | None:
    """Return the only candidate for a part, or None when there is none.

    Raises
    ------
    InputError
        There are several; the message names them and how to choose.
    """
    if len(candidates) < 2:
        return candidates[0] if candidates else None
    quoted = " and ".join(f"'{name}'" for name in candidates)
    option = f", or give the option --{role} '{candidates[0]}'" if role in WATER else ""
    raise InputError(
        f"{quoted} could each be the {role}",
        where=where,
        expected="one",
        remedy=f"choose one: under [ocean] in the study file write {role} = '{candidates[0]}'{option}",
    )


def by_name(role: str, names: Iterable[str]) -> list[str]:
    """Select the names that are known for a part; `names` are compared in lower case."""
    return [name for name in names if name.lower() in NAMES[role]]


def by_attributes(role: str, variables: Mapping[str, Mapping[str, Any]]) -> list[str]:
    """Select the netCDF variables that can play a part: by CF standard name first, then by name.

    A standard name with a modifier (a blank and a word after it) tells of a statistic or a flag, not of the quantity.

    Parameters
    ----------
    role : str
        One of `ROLES`.
    variables : mapping
        Name to attributes, of the variables that have the right dimensions.
    """
    data = {
        name: str(attributes.get("standard_name", "")).strip()
        for name, attributes in variables.items()
        if not name.lower().endswith(_NOT_DATA) and "flag_values" not in attributes
    }
    for group in STANDARD_NAMES[role]:
        found = [name for name, standard in data.items() if standard in group]
        if found:
            return _without_statistics(found)
    unnamed = [name for name, standard in data.items() if not standard or standard in NAMES[role]]
    return _without_statistics(by_name(role, unnamed))


def kind_of_temperature(name: str, standard_name: str = "") -> str:
    """Kind of temperature that a name tells of: "in situ", "potential" or "conservative"."""
    text = standard_name or name.lower()
    if "conservative" in text or text == "bigthetao":
        return "conservative"
    potential = "potential" in text or text in ("thetao", "theta", "ptemp", "pottemp")
    return "potential" if potential else "in situ"


def kind_of_salinity(name: str, standard_name: str = "") -> str:
    """Kind of salinity that a name tells of: "practical" or "absolute"."""
    return "absolute" if "absolute" in (standard_name or name.lower()) else "practical"


def kind_attributes(role: str, name: str, standard_name: str = "") -> dict[str, str]:
    """Attribute `kind` of a temperature or salinity, nothing for other parts."""
    if role == "temperature":
        return {"kind": kind_of_temperature(name, standard_name)}
    if role == "salinity":
        return {"kind": kind_of_salinity(name, standard_name)}
    return {}


def _without_statistics(names: list[str]) -> list[str]:
    if not any(name.endswith("_an") for name in names):
        return names
    return [name for name in names if not name.endswith(_STATISTICS)]
