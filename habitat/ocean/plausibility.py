"""Whether values can be what their file says they are; each refusal names the likely cause.

All checks take loaded arrays. For grids these are a sample (`habitat.ocean.columns.sample`), so that a grid of any size
is judged in seconds; the values themselves are never changed here.
"""

import numpy as np
import xarray as xr

from habitat import seawater
from habitat.errors import InputError

TEMPERATURE_LIMITS = (-3.0, 45.0)  # degC: supercooled water under ice shelves; shallow lagoons in summer
SALINITY_LIMITS = (0.0, 50.0)
NEAR_SURFACE = 100.0  # m; above it oxygen is near saturation except in upwelled or enclosed waters
POSSIBLE_SATURATION = (0.06, 2.5)  # median near the surface that a right unit can give
UNREMARKABLE_SATURATION = (0.3, 1.8)  # median near the surface that raises no question
USUAL_SATURATION = (0.5, 1.4)  # near the surface, in the unit that is likely meant
IMPOSSIBLE_SATURATION = 3.0
BULK = 0.05  # share of the samples
OXYGEN_UNITS = ("umol/kg", "umol/l", "ml/l", "mg/l", "mol/m3", "% saturation", "kPa")


def check_position(raw: xr.Dataset, where: str) -> None:
    """Check that every cast, or every row and column of a grid, has a position on Earth.

    Raises
    ------
    InputError
        A latitude or longitude is missing, or out of range.
    """
    for name, limit in (("latitude", 90.0), ("longitude", 360.0)):
        values = raw[name].to_numpy()
        missing = np.isnan(values)
        if missing.any():
            labels = raw["cast"].to_numpy()[missing]
            raise InputError(
                f"{labels.size} of {values.size} casts have no {name}, the first is '{labels[0]}'",
                where=where,
                expected=f"a {name} for every cast",
            )
        worst = float(values.flat[np.argmax(np.abs(values))])
        if abs(worst) > limit:
            raise InputError(
                f"{name} {worst:g}",
                where=where,
                expected=f"degrees between {-limit:g} and {limit:g}",
                remedy="check that latitude and longitude are not exchanged, and the fill value",
            )


def check_present(values: np.ndarray, role: str, discarded: dict[str, int], where: str) -> None:
    """Check that a quantity has any value at all.

    Raises
    ------
    InputError
        Every value is missing; the message says for which reasons.
    """
    if np.isfinite(values).any():
        return
    reasons = [f"{n} {r.split(': ', 1)[1]}" for r, n in discarded.items() if r.startswith(f"{role}: ")]
    raise InputError(
        f"every {role} value is missing{': ' if reasons else ''}{'; '.join(reasons)}",
        where=where,
        expected=f"measured {role}",
        remedy="leave the file out, or choose another variable",
    )


def check_temperature(celsius: np.ndarray, unit: str, where: str) -> list[str]:
    """Check temperatures after conversion from the claimed unit to degC.

    Returns
    -------
    list of str
        Suspicions.

    Raises
    ------
    InputError
        Most of the values cannot be temperatures of sea water.
    """
    median = float(np.nanmedian(celsius))
    low, high = TEMPERATURE_LIMITS
    if low <= median <= high:
        return _outside(celsius, "temperature", "degC", TEMPERATURE_LIMITS)
    if low <= median - 273.15 <= high:
        cause = f"this looks like kelvin labelled '{unit}'; state the unit as K"
    elif low <= median + 273.15 <= high:
        cause = f"this looks like degC labelled '{unit}'; state the unit as degC"
    elif low <= (median - 32) / 1.8 <= high:
        cause = f"this looks like Fahrenheit labelled '{unit}'; state the unit as degF"
    else:
        cause = "check the unit and the fill value"
    raise InputError(
        f"temperatures with a median of {median:.4g} degC (unit '{unit}')",
        where=where,
        expected=f"values between {low:g} and {high:g} degC",
        remedy=cause,
    )


def check_salinity(salinity: np.ndarray, where: str) -> list[str]:
    """Check salinities; arguments and results as for `check_temperature`."""
    low, high = SALINITY_LIMITS
    median, greatest = float(np.nanmedian(salinity)), float(np.nanmax(salinity))
    if not low <= median <= high:
        raise InputError(
            f"salinities with a median of {median:.4g}",
            where=where,
            expected=f"values between {low:g} and {high:g}",
            remedy="check the variable and the fill value",
        )
    if 0.02 < greatest < 0.05:
        return [f"salinity: the greatest value is {greatest:.3g}; if it is kg of salt per kg, multiply it by 1000"]
    return _outside(salinity, "salinity", "", SALINITY_LIMITS)


def check_oxygen(claimed: xr.DataArray, columns: xr.Dataset, unit: str, where: str) -> list[str]:
    """Check oxygen against what the water can hold at equilibrium with air.

    Near the surface (to 100 m, the shallowest sample of each column) oxygen is usually close to saturation. When
    its median is under 6 % or over 250 % of that, other units are tried; the file is refused when one of them fits,
    or when the values are impossible in any case. An oxygen-free surface that no other unit explains is kept.

    Parameters
    ----------
    claimed : xr.DataArray
        Oxygen in the claimed unit, last dimension `level`.
    columns : xr.Dataset
        The same samples converted: temperature, salinity, oxygen, depth, pressure, latitude, longitude.
    unit : str
        The claimed unit.
    where : str
        File and variable, for messages.

    Returns
    -------
    list of str
        Suspicions.

    Raises
    ------
    InputError
        The values cannot be in the claimed unit.
    """
    holds = seawater.solubility(columns["temperature"], columns["salinity"])
    saturation = (columns["oxygen"] / holds.where(holds > 0)).broadcast_like(claimed).transpose(*claimed.dims)
    values = saturation.to_numpy()
    finite = values[np.isfinite(values)]
    if not finite.size:
        raise InputError(
            "no sample has temperature, salinity and oxygen together",
            where=where,
            expected="all three on the same samples",
        )
    shallow = _shallowest(saturation, columns["depth"])
    median = float(np.median(shallow)) if shallow.size else np.nan
    low, high = POSSIBLE_SATURATION
    likely = (
        []
        if UNREMARKABLE_SATURATION[0] <= median <= UNREMARKABLE_SATURATION[1]
        else _likely_units(claimed, columns, holds)
    )
    found = _describe(claimed, unit, median)
    if median > high or (median < low and likely) or (np.isnan(median) and finite.max() > high):
        raise _wrong_unit(found, likely, where)
    if np.mean(finite > IMPOSSIBLE_SATURATION) > BULK:
        share = 100 * np.mean(finite > IMPOSSIBLE_SATURATION)
        raise _wrong_unit(f"{found}, and {share:.0f} % of all samples are above 300 %", likely, where)
    return _oxygen_suspicions(columns["oxygen"].to_numpy(), finite, median, likely, found)


def _oxygen_suspicions(
    oxygen: np.ndarray, saturation: np.ndarray, median: float, likely: list[str], found: str
) -> list[str]:
    notes = []
    if median < POSSIBLE_SATURATION[0]:
        notes.append(f"{found}: almost no oxygen near the surface; no other unit explains it, so it was kept")
    elif likely:
        notes.append(f"{found}; if the unit is wrong, it may be {' or '.join(likely)}")
    over = int((saturation > IMPOSSIBLE_SATURATION).sum())
    if over:
        notes.append(f"oxygen: {over} samples above 300 % of saturation were kept")
    negative = int((oxygen < 0).sum())
    if negative:
        notes.append(f"oxygen: {negative} values below zero, down to {np.nanmin(oxygen):.3g} umol/kg, were kept")
    return notes


def _likely_units(claimed: xr.DataArray, columns: xr.Dataset, holds: xr.DataArray) -> list[str]:
    """Units in which the samples near the surface would be 50 to 140 % saturated."""
    place = (columns[name] for name in ("temperature", "salinity", "pressure", "longitude", "latitude"))
    arrays = xr.broadcast(claimed, *place)
    likely = []
    for unit in OXYGEN_UNITS:
        concentration = seawater.concentration_from(*arrays, unit=unit)
        shallow = _shallowest((concentration / holds.where(holds > 0)).transpose(*claimed.dims), columns["depth"])
        if shallow.size and USUAL_SATURATION[0] <= np.median(shallow) <= USUAL_SATURATION[1]:
            likely.append(unit)
    return likely


def _shallowest(saturation: xr.DataArray, depth: xr.DataArray) -> np.ndarray:
    """Value of the shallowest valid sample of each column, where that lies within `NEAR_SURFACE`."""
    depths = depth.where(np.isfinite(saturation)).where(depth <= NEAR_SURFACE).transpose(*saturation.dims).to_numpy()
    values = saturation.to_numpy()
    filled = np.where(np.isfinite(depths), depths, np.inf)
    first = np.take_along_axis(values, filled.argmin(axis=-1)[..., None], axis=-1)[..., 0]
    return first[np.isfinite(filled.min(axis=-1))]


def _describe(claimed: xr.DataArray, unit: str, median: float) -> str:
    values = claimed.to_numpy()
    text = f"oxygen from {np.nanmin(values):.4g} to {np.nanmax(values):.4g} in '{unit}'"
    return text if np.isnan(median) else f"{text} would be {100 * median:.3g} % of saturation near the surface"


def _wrong_unit(found: str, likely: list[str], where: str) -> InputError:
    remedy = f"the unit may be {' or '.join(likely)}: correct it in the file" if likely else "check the variable"
    return InputError(found, where=where, expected="6 to 250 % near the surface, below 300 % deeper", remedy=remedy)


def _outside(values: np.ndarray, role: str, unit: str, limits: tuple[float, float]) -> list[str]:
    count = int(((values < limits[0]) | (values > limits[1])).sum())
    if not count:
        return []
    least, greatest = np.nanmin(values), np.nanmax(values)
    return [
        f"{role}: {count} values outside {limits[0]:g} to {limits[1]:g} {unit}".rstrip()
        + f" were kept (from {least:.4g} to {greatest:.4g})"
    ]
