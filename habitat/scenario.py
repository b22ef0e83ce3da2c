"""The same ocean with stated changes: warmed, and with its oxygen changed by a stated rule.

Warming alone does not say what becomes of the oxygen, and the choice decides the answer: at a fixed concentration
warming *raises* the partial pressure by about 2 % per kelvin, since warm water holds less; at a fixed saturation the
partial pressure hardly changes; at a fixed apparent oxygen utilisation it falls. `rule_effects` tells by how much here.
"""

import re
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from habitat.errors import InputError, UnitError
from habitat.files import missing_file
from habitat.ocean import roles
from habitat.ocean.recognise import open_netcdf
from habitat.seawater import concentration_at_saturation, concentration_from, po2_from_concentration
from habitat.units import factor, oxygen_unit, temperature_difference_factor

KEEP_RULES = ("keep saturation", "keep AOU", "keep concentration")

SAMPLE_SIZE = 2**19
"""Cells of a large grid looked at to say what a rule does to PO2."""


SAME_COORDINATE = 1e-4
"""Coordinates this close are the same [degrees, or m]: files hold them with 4 bytes, or in another convention."""


@dataclass(frozen=True)
class FieldFile:
    """A change given as a variable of a netCDF file."""

    path: Path
    variable: str


@dataclass(frozen=True)
class Percent:
    """A relative change of the oxygen concentration [%]."""

    value: float


@dataclass(frozen=True)
class Change:
    """An absolute change of oxygen, in any unit of dissolved oxygen."""

    value: float
    unit: str

    @classmethod
    def parse(cls, text: str) -> "Change":
        """Read a change such as ``"-10 umol/kg"``.

        Raises
        ------
        UnitError
            There is no number, or the unit is not one of dissolved oxygen.
        """
        match = re.fullmatch(r"\s*((?>[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?))\s*(\S.*?)\s*", text)
        if match is None:
            raise UnitError(f"oxygen change '{text}'", expected='a number and a unit, for example "-10 umol/kg"')
        if oxygen_unit(match[2]).kind == "saturation":
            found = f"oxygen change '{text}' is in percent"
            raise UnitError(found, remedy="for a share of the oxygen concentration write {percent = -8}")
        return cls(float(match[1]), match[2])


@dataclass(frozen=True)
class Scenario:
    """Stated changes to an ocean.

    Attributes
    ----------
    name : str
    warming : float, sequence of (depth, warming) pairs, or FieldFile
        Added to the in-situ temperature [degC]; a profile is linear between its depths [m] and constant beyond them.
    oxygen : str, Percent, Change or FieldFile
        One of `KEEP_RULES`, or a change of the oxygen concentration.

    Raises
    ------
    InputError
        `oxygen` is a text that is not one of `KEEP_RULES`.
    """

    name: str
    warming: float | tuple[tuple[float, float], ...] | FieldFile
    oxygen: str | Percent | Change | FieldFile

    def __post_init__(self) -> None:
        if isinstance(self.oxygen, str) and self.oxygen not in KEEP_RULES:
            raise InputError(
                f"oxygen rule '{self.oxygen}'",
                where=f"scenario '{self.name}'",
                expected=" or ".join(f"'{rule}'" for rule in KEEP_RULES),
            )


def apply(columns: xr.Dataset, scenario: Scenario) -> xr.Dataset:
    """Change temperature and oxygen of water columns as a scenario says.

    Parameters
    ----------
    columns : xarray.Dataset
        Water columns, lazy or not.
    scenario : Scenario

    Returns
    -------
    xarray.Dataset
        The changed columns. Two more variables count samples: `clipped_samples`, whose oxygen came out
        negative and was set to 0, and `lost_samples`, for which the field gave no change. The attribute `notes` holds
        sentences about fields and profiles that end within the ocean.

    Raises
    ------
    InputError
        A field's file or variable is missing, or does not cover the columns.
    UnitError
        A field's unit is missing or of the wrong kind.
    """
    notes: list[str] = []
    warmed = columns["temperature"] + _warming(columns, scenario.warming, notes)
    oxygen = _oxygen_after(columns, warmed, scenario.oxygen, notes)
    dims = columns["oxygen"].dims
    warmed, oxygen = warmed.transpose(*dims), oxygen.transpose(*dims)
    lost = (np.isnan(warmed) | np.isnan(oxygen)) & np.isfinite(columns["temperature"]) & np.isfinite(columns["oxygen"])
    changed = columns.assign(
        temperature=warmed.assign_attrs(columns["temperature"].attrs),
        oxygen=oxygen.clip(min=0.0).assign_attrs(columns["oxygen"].attrs),
        clipped_samples=(oxygen < 0).sum(),
        lost_samples=lost.sum(),
    )
    return changed.assign_attrs(notes=notes)


def rule_effects(columns: xr.Dataset, scenario: Scenario, *, hydrostatic: bool = True) -> pd.DataFrame:
    """Say what the scenario, and each of the three keep rules in its place, does to PO2 in this ocean.

    Large grids are looked at in about half a million evenly spaced cells.

    Returns
    -------
    pandas.DataFrame
        One row a rule: ``rule, chosen, change_kpa, change_kpa_p05, change_kpa_p95, change_percent``; medians and 5-95 %
        range over the samples, percent of the baseline's median.
    """
    columns = _evenly_spaced(columns)
    rows = []
    before = _po2(columns, hydrostatic)
    for rule in dict.fromkeys([scenario.oxygen, *KEEP_RULES]):
        difference = _po2(apply(columns, replace(scenario, oxygen=rule)), hydrostatic) - before
        low, middle, high = np.nanquantile(difference, [0.05, 0.5, 0.95])
        percent = 100.0 * middle / np.nanmedian(before)
        rows.append((describe_oxygen(rule), rule == scenario.oxygen, middle, low, high, percent))
    names = ["rule", "chosen", "change_kpa", "change_kpa_p05", "change_kpa_p95", "change_percent"]
    return pd.DataFrame(rows, columns=names)


def describe_oxygen(rule: Any) -> str:
    """Say an oxygen rule in words."""
    if isinstance(rule, Percent):
        return f"concentration changed by {rule.value:+g} %"
    if isinstance(rule, Change):
        return f"oxygen changed by {rule.value:+g} {rule.unit}"
    if isinstance(rule, FieldFile):
        return f"oxygen changed by the field '{rule.variable}' of {rule.path.name}"
    return rule


def describe_warming(warming: Any) -> str:
    """Say a warming in words."""
    if isinstance(warming, FieldFile):
        return f"temperature changed by the field '{warming.variable}' of {warming.path.name}"
    if isinstance(warming, tuple):
        return "temperature changed by " + ", ".join(f"{value:+g} degC at {depth:g} m" for depth, value in warming)
    return f"temperature changed by {warming:+g} degC"


# --- temperature and oxygen --------------------------------------------------------------------------------------


def _warming(columns: xr.Dataset, warming: Any, notes: list[str]) -> Any:
    if isinstance(warming, FieldFile):
        field = _read_field(warming)
        try:
            scale = temperature_difference_factor(field.attrs["units"])
        except UnitError as error:
            raise UnitError(error.found, where=_where(warming), expected="a temperature unit such as K") from None
        return _onto(field, columns, warming, notes) * scale
    if not isinstance(warming, tuple):
        return warming
    depths, values = np.array(warming, dtype=float).T
    deepest = float(columns["depth"].max())
    if deepest > depths[-1]:
        notes.append(
            f"the warming profile ends at {depths[-1]:g} m; {values[-1]:+g} degC was used below, to {deepest:g} m"
        )
    return xr.apply_ufunc(
        lambda depth: np.interp(depth, depths, values), columns["depth"], dask="parallelized", output_dtypes=[float]
    )


def _oxygen_after(columns: xr.Dataset, warmed: xr.DataArray, rule: Any, notes: list[str]) -> xr.DataArray:
    oxygen = columns["oxygen"]
    place = [columns[name] for name in ("salinity", "pressure", "longitude", "latitude")]
    if rule == "keep concentration":
        return oxygen
    if isinstance(rule, Percent):
        return oxygen * (1.0 + rule.value / 100.0)
    if isinstance(rule, Change):
        return oxygen + concentration_from(rule.value, columns["temperature"], *place, unit=rule.unit)
    if isinstance(rule, FieldFile):
        field = _read_field(rule)
        try:
            unit = oxygen_unit(field.attrs["units"])
        except UnitError as error:
            raise UnitError(error.found, where=_where(rule), expected=error.expected) from None
        change = _onto(field, columns, rule, notes)
        if unit.kind == "saturation":
            notes.append(f"'{rule.variable}' is a relative change of the oxygen concentration")
            return oxygen * (1.0 + change * unit.factor)
        return oxygen + concentration_from(change, columns["temperature"], *place, unit=field.attrs["units"])
    before = concentration_at_saturation(columns["temperature"], *place)
    after = concentration_at_saturation(warmed, *place)
    return oxygen * (after / before) if rule == "keep saturation" else oxygen + (after - before)


def _po2(columns: xr.Dataset, hydrostatic: bool) -> np.ndarray:
    names = ("oxygen", "temperature", "salinity", "pressure")
    po2 = po2_from_concentration(*(columns[name] for name in names), hydrostatic=hydrostatic)
    return po2.transpose(*columns["oxygen"].dims).to_numpy()


def _evenly_spaced(columns: xr.Dataset) -> xr.Dataset:
    """Every n-th column, so that about `SAMPLE_SIZE` cells are left; all levels are kept."""
    lead = [dim for dim in columns["oxygen"].dims if dim != "level"]
    thinning = int(np.ceil((columns["oxygen"].size / SAMPLE_SIZE) ** (1 / len(lead))))
    return columns.isel({dim: slice(None, None, thinning) for dim in lead})


# --- fields from files -------------------------------------------------------------------------------------------


def _where(source: FieldFile) -> str:
    return f"{source.path}, variable '{source.variable}'"


def _read_field(source: FieldFile) -> xr.DataArray:
    """Read a field; its dimensions are named depth, latitude, longitude, time, whichever it has."""
    if not source.path.exists():
        raise missing_file(source.path)
    with open_netcdf(source.path) as dataset:
        if source.variable not in dataset:
            known = ", ".join(map(str, dataset.data_vars))
            raise InputError(f"no variable '{source.variable}'", where=str(source.path), expected=f"one of {known}")
        field = dataset[source.variable].load()
        coords = {str(name): dataset[name].load() for name in field.dims if name in dataset.variables}
    if not field.attrs.get("units"):
        raise UnitError("the field has no unit", where=_where(source), remedy="give the variable a units attribute")
    return _labelled(field, coords, source)


def _labelled(field: xr.DataArray, coords: dict[str, xr.DataArray], source: FieldFile) -> xr.DataArray:
    attributes = {name: values.attrs for name, values in coords.items()}
    of_dim = {
        name: role
        for role in ("depth", "latitude", "longitude", "time")
        for name in roles.by_attributes(role, attributes)
    }
    unknown = [dim for dim in field.dims if dim not in of_dim and field.sizes[dim] > 1]
    if unknown:
        raise InputError(
            f"dimension '{unknown[0]}' is not understood",
            where=_where(source),
            expected="dimensions of depth, latitude, longitude and time with one-dimensional coordinates",
        )
    field = field.squeeze([dim for dim in field.dims if dim not in of_dim], drop=True).reset_coords(drop=True)
    field = field.rename({dim: of_dim[dim] for dim in field.dims})
    if "time" in field.dims and field.sizes["time"] == 1:
        field = field.isel(time=0, drop=True)
    if "depth" in field.dims:
        depth = np.abs(field["depth"] * factor(str(field["depth"].attrs.get("units", "m")), "m"))
        field = field.assign_coords(depth=depth)
    return field.sortby([dim for dim in field.dims if dim != "time"])


def _onto(field: xr.DataArray, columns: xr.Dataset, source: FieldFile, notes: list[str]) -> xr.DataArray:
    """Bring a field onto the columns: its own values along axes that it shares, else by linear interpolation.

    Interpolating to coordinates that the field has would lose the values beside missing ones (0 x NaN is NaN).
    """
    targets = {name: _target(field, columns, name) for name in field.dims if name != "time"}
    dims = [dim for target in targets.values() for dim in target.dims]
    if len(dims) == len(set(dims)):  # axes of a grid; the coordinates of casts belong together
        for name, target in list(targets.items()):
            own = pd.Index(field[name].to_numpy().astype(float))
            position = own.get_indexer(target.to_numpy(), method="nearest", tolerance=SAME_COORDINATE)
            if (position >= 0).all():
                field = field.isel({name: target.copy(data=position)}).drop_vars(name)
                del targets[name]
    targets = {name: _within(target, field[name].to_numpy(), name, source, notes) for name, target in targets.items()}
    if "time" in field.dims:
        field = _same_times(field, columns, source)
    result = field.interp(targets, method="linear") if targets else field
    return result.drop_vars([name for name in result.coords if name not in columns.coords or name in targets])


def _target(field: xr.DataArray, columns: xr.Dataset, name: str) -> xr.DataArray:
    """Coordinate of the columns at which the field is wanted, longitudes in the field's convention."""
    target = columns[name].astype(float).drop_vars(list(columns[name].coords))
    if name == "longitude":
        return target - 360.0 * np.round((target - float(field[name].mean())) / 360.0)
    return target


def _within(target: xr.DataArray, own: np.ndarray, name: str, source: FieldFile, notes: list[str]) -> xr.DataArray:
    """Hold the field constant over half a cell sideways, and above and below its depths; refuse what is beyond."""
    least, greatest = float(target.min()), float(target.max())
    if name == "depth":
        if greatest > own[-1]:
            notes.append(
                f"'{source.variable}' ends at {own[-1]:g} m; its deepest value was used below, to {greatest:g} m"
            )
    else:
        reach = np.diff(own).max() / 2 * (1 + 1e-9) if own.size > 1 else 0.0
        if least < own[0] - reach or greatest > own[-1] + reach:
            raise InputError(
                f"the field covers {name} {own[0]:g} to {own[-1]:g}, the ocean {least:g} to {greatest:g}",
                where=_where(source),
                expected="a field that covers the ocean",
                remedy="extend the field, or choose fewer ocean files",
            )
    return target.clip(own[0], own[-1])


def _same_times(field: xr.DataArray, columns: xr.Dataset, source: FieldFile) -> xr.DataArray:
    steps = columns.sizes.get("time", 1)
    if "time" not in columns["oxygen"].dims or field.sizes["time"] != steps:
        raise InputError(
            f"the field has {field.sizes['time']} times, the ocean {steps}",
            where=_where(source),
            expected="one time, or as many as the ocean has",
            remedy="average the field over time, or give it the ocean's times",
        )
    return field.assign_coords(time=columns["time"])
