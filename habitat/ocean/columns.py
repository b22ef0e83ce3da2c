"""The one place where what a reader found becomes finished water columns: units, kinds, order, checks, attributes."""

from collections.abc import Iterator
from contextlib import contextmanager

import numpy as np
import xarray as xr

from habitat import seawater, units
from habitat.errors import InputError, UnitError
from habitat.ocean import plausibility
from habitat.ocean.recognise import reading_errors
from habitat.ocean.roles import OXYGEN_KIND_OF_STANDARD_NAME, VERTICAL, WATER
from habitat.ocean.vertical import downward

SAMPLE_CELLS = 2_000_000  # cells of the three variables together that are looked at to judge a grid
GRID_FILL = (-99.0, 1e9)  # at or below, at or above: a fill value that the file does not declare

ATTRIBUTES = {
    "temperature": {
        "units": "degC",
        "long_name": "temperature, in situ, ITS-90",
        "standard_name": "sea_water_temperature",
    },
    "salinity": {"units": "1", "long_name": "practical salinity", "standard_name": "sea_water_practical_salinity"},
    "oxygen": {
        "units": "umol/kg",
        "long_name": "dissolved oxygen",
        "standard_name": "moles_of_oxygen_per_unit_mass_in_sea_water",
    },
    "depth": {"units": "m", "long_name": "depth", "standard_name": "depth", "positive": "down"},
    "pressure": {
        "units": "dbar",
        "long_name": "sea pressure",
        "standard_name": "sea_water_pressure_due_to_sea_water",
    },
    "seabed_depth": {
        "units": "m",
        "long_name": "depth of the sea floor",
        "standard_name": "sea_floor_depth_below_mean_sea_level",
    },
    "latitude": {"units": "degrees_north", "long_name": "latitude", "standard_name": "latitude"},
    "longitude": {"units": "degrees_east", "long_name": "longitude", "standard_name": "longitude"},
    "cast": {"long_name": "cast", "cf_role": "profile_id"},
    "time": {"long_name": "time", "standard_name": "time"},  # no units: xarray encodes dates itself
}
_TIME_WITHOUT_DATE = {
    "code": "part of the year: month (1-12), season (13-16) or whole year (0)",
    "index": "number of the time step in the file",
}
_EXAMPLE_UNIT = {"temperature": "degC", "oxygen": "umol/kg", "depth": "m", "pressure": "dbar", "seabed_depth": "m"}


def complete(raw: xr.Dataset) -> xr.Dataset:
    """Turn what a reader found into water columns of the contract.

    Parameters
    ----------
    raw : xr.Dataset
        Parts in the file's own units with attributes `units`, `kind` and `name`; attrs form, source, reader, names,
        unit_remedy, conversions, suspicious and discarded. Casts are loaded; grids may be lazy.

    Returns
    -------
    xr.Dataset
        temperature [degC, in situ, ITS-90], salinity [practical], oxygen [umol/kg], depth [m], pressure [dbar],
        (cast, level) or (time?, latitude, longitude, level); grids as lazy as they came.

    Raises
    ------
    InputError
        A part is missing, or its values cannot be what the file says they are.
    UnitError
        A unit is missing or not of the right kind.
    """
    _require_parts(raw)
    _require_units(raw)
    where = raw.attrs["source"]
    plausibility.check_position(raw, where)
    if raw.attrs["form"] == "grid":
        raw = _drop_lone_step(raw.reset_coords("depth"))
    part = sample(raw)
    fills = _undeclared_fills(part)
    if fills:
        raw, part = _masked(raw, fills), _masked(part, fills)
    vertical = next(role for role in VERTICAL if role in raw)
    for role in (vertical, *WATER):
        plausibility.check_present(part[role].to_numpy(), role, raw.attrs["discarded"], where)
    notes = _check_water(part)
    judged, conversions, suspicious = _convert(part)
    oxygen_unit = raw["oxygen"].attrs["units"]
    notes += plausibility.check_oxygen(part["oxygen"], judged, oxygen_unit, _place(raw, "oxygen"))
    columns = judged if part is raw else _convert(raw)[0]
    sentences = [
        f"{role}: fill value {value:g}, which the file does not declare, taken as missing" for role, value in fills
    ]
    columns.attrs = raw.attrs | {
        "conversions": [*raw.attrs["conversions"], *sentences, *conversions],
        "suspicious": [*raw.attrs["suspicious"], *suspicious, *notes],
    }
    return _described(_sorted_casts(columns) if columns.attrs["form"] == "casts" else columns)


def sample(raw: xr.Dataset) -> xr.Dataset:
    """Part of the columns by which all are judged, loaded: casts whole, grids by a part.

    Of a grid the first time step and every level are looked at, in columns spread evenly so that no more than
    `SAMPLE_CELLS` cells are loaded. A grid of hundreds of gigabytes is so judged in seconds; a fault that only later
    steps have is not seen.
    """
    if raw.attrs["form"] == "casts":
        return raw
    part = raw.isel(time=0) if "time" in raw.dims else raw
    columns = part.sizes["latitude"] * part.sizes["longitude"]
    allowed = max(1, SAMPLE_CELLS // (len(WATER) * part.sizes["level"]))
    stride = int(np.ceil(np.sqrt(columns / allowed)))
    part = part.isel(latitude=slice(None, None, stride), longitude=slice(None, None, stride))
    with reading_errors(raw.attrs["source"]):
        return part.compute()


# --- what must be there ------------------------------------------------------------------------------------------


def _require_parts(raw: xr.Dataset) -> None:
    missing = [role for role in (*WATER, "latitude", "longitude") if role not in raw]
    if not any(role in raw for role in VERTICAL):
        missing.append("depth or pressure")
    if not missing:
        return
    held, form = [role for role in WATER if role in raw], raw.attrs["form"]
    beside = f" (only {' and '.join(held)})" if held and set(missing) & set(WATER) else ""
    shown = ", ".join(raw.attrs["names"]) or "(none)"
    raise InputError(
        f"no {' and no '.join(missing)}{beside} among {shown}",
        where=raw.attrs["source"],
        expected=raw.attrs["part_hint"].format(role=missing[0].split(" ")[0]),
        remedy="give the files that hold the others together with this one" if held and form == "grid" else "",
    )


def _require_units(raw: xr.Dataset) -> None:
    for role, example in _EXAMPLE_UNIT.items():
        if role in raw and not raw[role].attrs["units"]:
            raise UnitError(
                "no unit given",
                where=_place(raw, role),
                expected=f"the unit of {role}",
                remedy=raw.attrs["unit_remedy"].format(role=role, unit=example),
            )


def _place(raw: xr.Dataset, role: str) -> str:
    return f"{raw.attrs['source']}, '{raw[role].attrs['name']}'"


@contextmanager
def _unit_errors(raw: xr.Dataset, role: str) -> Iterator[None]:
    """Add file and variable to the message about a unit."""
    try:
        yield
    except UnitError as error:
        example = _EXAMPLE_UNIT.get(role, "1")
        remedy = error.remedy or raw.attrs["unit_remedy"].format(role=role, unit=example)
        raise UnitError(error.found, where=_place(raw, role), expected=error.expected, remedy=remedy) from None


# --- fill values and first checks --------------------------------------------------------------------------------


def _drop_lone_step(raw: xr.Dataset) -> xr.Dataset:
    """Drop a single time step without a date: it says nothing."""
    if raw.sizes.get("time") == 1 and raw["time"].attrs["kind"] != "date":
        return raw.isel(time=0, drop=True)
    return raw


def _undeclared_fills(part: xr.Dataset) -> list[tuple[str, float]]:
    """Part and value of fill values that a grid does not declare; a table's are counted by its reader."""
    if part.attrs["form"] == "casts":
        return []
    found = []
    for role in WATER:
        values = part[role].to_numpy()
        with np.errstate(invalid="ignore"):
            odd = np.unique(values[(values <= GRID_FILL[0]) | (values >= GRID_FILL[1])])
        found += [(role, float(value)) for value in odd[:3]]
    return found


def _masked(raw: xr.Dataset, fills: list[tuple[str, float]]) -> xr.Dataset:
    kept = {
        role: raw[role].where((raw[role] > GRID_FILL[0]) & (raw[role] < GRID_FILL[1])) for role in {r for r, _ in fills}
    }
    return raw.assign({role: values.assign_attrs(raw[role].attrs) for role, values in kept.items()})


def _check_water(part: xr.Dataset) -> list[str]:
    """Check temperature and salinity before they are converted from one kind to another."""
    temperature, salinity = part["temperature"], part["salinity"]
    with _unit_errors(part, "temperature"):
        factor, offset = units.celsius(temperature.attrs["units"])
    celsius = temperature.to_numpy() * factor + offset
    notes = plausibility.check_temperature(celsius, temperature.attrs["units"], _place(part, "temperature"))
    return notes + plausibility.check_salinity(salinity.to_numpy(), _place(part, "salinity"))


# --- conversion --------------------------------------------------------------------------------------------------


def _convert(raw: xr.Dataset) -> tuple[xr.Dataset, list[str], list[str]]:
    """Units and kinds of the contract, elementwise and as lazy as the input; sentences on what was done."""
    raw = raw.copy()  # older xarray clears the attributes of coordinates that pass through arithmetic, in place
    columns = xr.Dataset(coords={name: c.variable for name, c in raw.coords.items()})
    vertical, conversions, suspicious = _vertical(raw)
    columns = columns.assign(vertical)
    place = (columns["pressure"], raw["longitude"], raw["latitude"])
    for convert in (_salinity, _temperature, _oxygen):
        role, values, sentences = convert(raw, columns, place)
        columns[role] = values
        conversions += sentences
    if "seabed_depth" in raw:
        columns["seabed_depth"], sentences = _seabed(raw)
        conversions += sentences
    return columns, conversions, suspicious


def _vertical(raw: xr.Dataset) -> tuple[dict[str, xr.DataArray], list[str], list[str]]:
    """Depth and pressure, each from the file where it has it, else computed from the other."""
    found, conversions, suspicious = {}, [], []
    for role in VERTICAL:
        if role in raw:
            found[role], did, doubts = downward(raw[role].reset_coords(drop=True), role, _place(raw, role))
            conversions += did
            suspicious += doubts
    computed = {
        "depth": (seawater.depth_from_pressure, "pressure"),
        "pressure": (seawater.pressure_from_depth, "depth"),
    }
    given = dict(found)
    for role, (function, other) in computed.items():
        if other in given:
            values = function(given[other], raw["latitude"])
            found[role] = given[role].fillna(values) if role in given else values
            if role not in given:
                conversions.append(f"{role} computed from {other} and latitude (TEOS-10)")
    return {role: values.reset_coords(drop=True) for role, values in found.items()}, conversions, suspicious


_Place = tuple[xr.DataArray, xr.DataArray, xr.DataArray]


def _salinity(raw: xr.Dataset, _: xr.Dataset, place: _Place) -> tuple[str, xr.DataArray, list[str]]:
    salinity = raw["salinity"].astype(float)
    unit, kind = salinity.attrs["units"], salinity.attrs["kind"]
    if unit and not (unit == "‰" or unit.lower() == "ppt"):
        with _unit_errors(raw, "salinity"):
            parsed = units.parse_unit(unit)
            units.factor(unit, "dimensionless")
        if parsed == units.parse_unit("g/kg"):
            kind = "absolute"
    if kind == "absolute":
        sentence = "salinity: Absolute Salinity to practical salinity (TEOS-10)"
        return "salinity", seawater.practical_salinity_from_absolute(salinity, *place), [sentence]
    return "salinity", salinity, []


def _temperature(raw: xr.Dataset, columns: xr.Dataset, place: _Place) -> tuple[str, xr.DataArray, list[str]]:
    temperature = raw["temperature"].astype(float)
    unit, kind = temperature.attrs["units"], temperature.attrs["kind"]
    sentences = []
    factor, offset = units.celsius(unit)
    if (factor, offset) != (1.0, 0.0):
        temperature = temperature * factor + offset
        sentences.append(f"temperature: {unit} to degC")
    if units.is_ipts68(unit):
        temperature = seawater.its90_from_ipts68(temperature)
        sentences.append("temperature: IPTS-68 to ITS-90 (divided by 1.00024)")
    if kind == "potential":
        temperature = seawater.temperature_from_potential(temperature, columns["salinity"], *place)
        sentences.append("temperature: potential temperature to in-situ temperature (TEOS-10)")
    elif kind == "conservative":
        temperature = seawater.temperature_from_conservative(temperature, columns["salinity"], *place)
        sentences.append("temperature: Conservative Temperature to in-situ temperature (TEOS-10)")
    return "temperature", temperature, sentences


def _oxygen(raw: xr.Dataset, columns: xr.Dataset, place: _Place) -> tuple[str, xr.DataArray, list[str]]:
    oxygen = raw["oxygen"].astype(float)
    unit = oxygen.attrs["units"]
    with _unit_errors(raw, "oxygen"):
        meaning = units.oxygen_unit(unit)
    sentences = []
    standard = oxygen.attrs.get("standard_name", "")
    told = OXYGEN_KIND_OF_STANDARD_NAME.get(standard, meaning.kind)
    if told != meaning.kind:
        sentences.append(
            f"oxygen: the standard name {standard} means '{told}', the unit '{unit}' means '{meaning.kind}'; "
            "the unit was followed"
        )
    if meaning.kind == "per mass":
        if meaning.factor != 1:
            sentences.append(f"oxygen: {unit} to umol/kg (times {meaning.factor:.6g})")
        return "oxygen", oxygen * meaning.factor, sentences
    how = {
        "per volume": "with potential density at 0 dbar",
        "saturation": "with the solubility at potential temperature",
        "partial pressure": "with the solubility at in-situ temperature and the hydrostatic term",
    }
    sentences.append(f"oxygen: {unit} to umol/kg {how[meaning.kind]}")
    water = (columns["temperature"], columns["salinity"])
    return "oxygen", seawater.concentration_from(oxygen, *water, *place, unit=unit), sentences


def _seabed(raw: xr.Dataset) -> tuple[xr.DataArray, list[str]]:
    """Depth of the sea floor; where positive depths tell the sign, the others are land."""
    seabed = raw["seabed_depth"].reset_coords(drop=True)
    with reading_errors(raw.attrs["source"]):
        seabed = seabed.astype(float).load()
    attributes = seabed.attrs
    sentences = []
    land = int((seabed <= 0).sum())
    if land and (seabed > 0).any():
        seabed = seabed.where(seabed > 0).assign_attrs(attributes)
        sentences.append(f"seabed_depth: {land} values of zero or less taken as land")
    values, did, _ = downward(seabed, "depth", _place(raw, "seabed_depth"))
    return values, [*sentences, *(sentence.replace("depth:", "seabed_depth:", 1) for sentence in did)]


# --- order and attributes ----------------------------------------------------------------------------------------


def _sorted_casts(columns: xr.Dataset) -> xr.Dataset:
    """Order the levels of each cast by depth, missing depths last, and cut off levels that are empty in all casts."""
    depth = columns["depth"].to_numpy()
    order = np.argsort(depth, axis=1, kind="stable")
    moved = (np.diff(order, axis=1) < 0).any(axis=1) & np.isfinite(depth).any(axis=1)
    levelled = [name for name, values in columns.data_vars.items() if "level" in values.dims]
    for name in levelled:
        values = columns[name].transpose("cast", "level").to_numpy()
        columns[name] = (("cast", "level"), np.take_along_axis(values, order, axis=1))
    empty = np.logical_and.reduce([np.isnan(columns[name].to_numpy()).all(axis=0) for name in levelled])
    columns = columns.isel(level=slice(0, int(np.flatnonzero(~empty)[-1]) + 1))
    if moved.any():
        columns.attrs["conversions"].append(f"levels put in order of increasing depth in {moved.sum()} casts")
    repeated = int((np.diff(columns["depth"].to_numpy(), axis=1) == 0).sum())
    if repeated:
        columns.attrs["suspicious"].append(f"depth: {repeated} levels lie at the same depth as the level above")
    if "seabed_depth" in columns:
        below = int((columns["depth"] > columns["seabed_depth"]).any("level").sum())
        if below:
            columns.attrs["suspicious"].append(f"seabed_depth: {below} casts have samples below the sea floor given")
    return columns


def _described(columns: xr.Dataset) -> xr.Dataset:
    order = ("cast", "time", "latitude", "longitude", "level")
    columns = columns.transpose(*(dim for dim in order if dim in columns.dims))
    for name in columns.variables:
        if name in ATTRIBUTES:
            kind = columns[name].attrs.get("kind")
            columns[name].attrs = dict(ATTRIBUTES[name])
            if name == "time" and kind in _TIME_WITHOUT_DATE:
                columns[name].attrs = {"long_name": _TIME_WITHOUT_DATE[kind], "units": "1"}
    return columns[[name for name in ATTRIBUTES if name in columns.data_vars]]
