"""Depth and pressure as files give them, turned into metres or decibars, positive downward."""

import numpy as np
import xarray as xr

from habitat import units
from habitat.errors import InputError, UnitError

SURFACE_NOISE = -2.0  # m or dbar; a sensor just under the surface may read slightly negative


def downward(values: xr.DataArray, role: str, where: str) -> tuple[xr.DataArray, list[str], list[str]]:
    """Depth [m, positive down] or sea pressure [dbar] from the file's own unit and sign.

    Parameters
    ----------
    values : xr.DataArray
        With attributes `units` and, when the file says so, `positive`.
    role : {"depth", "pressure"}
        Which of the two it is.
    where : str
        File and column, for messages.

    Returns
    -------
    values : xr.DataArray
    conversions, suspicious : list of str
        Sentences for the user.

    Raises
    ------
    InputError
        Positive and negative values are mixed.
    UnitError
        The unit is not one of length, or pressure.
    """
    target = {"depth": "m", "pressure": "dbar"}[role]
    unit = values.attrs["units"]
    try:
        factor = units.factor(unit, target)
    except UnitError as error:
        raise UnitError(error.found, where=where, expected=f"a unit such as {target}") from None
    conversions, suspicious = [], []
    if factor != 1:
        conversions.append(f"{role}: {unit} to {target} (times {factor:.6g})")
    scaled = (values * factor).astype(float)
    least, greatest = _range(scaled)
    says_up = str(values.attrs.get("positive", "")).lower() == "up"
    if least < 0 and greatest <= 0:
        conversions.append(f"{role}: values run upward ({least:g} to {greatest:g} {target}); the sign was turned")
        return _finish(-scaled, values, target), conversions, suspicious
    if least < SURFACE_NOISE:
        raise InputError(
            f"{role} has both signs, from {least:g} to {greatest:g} {target}",
            where=where,
            expected="values positive downward, or all of them negative",
            remedy="check the sign and the fill value",
        )
    if least < 0:
        suspicious.append(f"{role}: slightly negative values down to {least:g} {target} were kept")
    if says_up:
        suspicious.append(f"{role}: the file says 'positive: up', but the values are not negative; taken as {role}s")
    return _finish(scaled, values, target), conversions, suspicious


def _range(values: xr.DataArray) -> tuple[float, float]:
    finite = values.to_numpy()[np.isfinite(values.to_numpy())]
    return (float(finite.min()), float(finite.max())) if finite.size else (0.0, 0.0)


def _finish(scaled: xr.DataArray, original: xr.DataArray, target: str) -> xr.DataArray:
    """Finish the values; the file's own unit stays beside the new one, for the inspection."""
    result = scaled + 0.0  # turns -0.0 into 0.0
    found = original.attrs.get("unit_found", original.attrs["units"])
    result.attrs = {"units": target, "unit_found": found, "name": original.attrs.get("name", "")}
    return result
