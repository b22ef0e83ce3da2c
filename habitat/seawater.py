"""Oxygen in seawater: concentration, saturation and partial pressure; temperature and salinity kinds; depth.

Every function is elementwise and broadcasts. It takes numbers, numpy arrays (masked ones too), xarray objects and dask
arrays, computes in float64, and returns the same kind of container; lazy input stays lazy. Missing or masked values
come back as NaN. Pressures are sea pressures (0 at the surface).

The chain from concentration to partial pressure is the recommendation of SCOR WG 142 (Bittig et al.,
doi:10.13155/45915), with the in-situ temperature throughout: the oxygen pressure that an animal meets where it is.
Saturation and AOU are statements about the sea surface and use potential temperature.
"""

import functools
import inspect
from collections.abc import Callable
from typing import Any

import gsw
import numpy as np
import xarray as xr

from habitat.units import UMOL_PER_ML, ZERO_CELSIUS, oxygen_unit

OXYGEN_MOLE_FRACTION = 0.20946
"""Mole fraction of O2 in dry air [1] (Glueckauf 1951, as used by SCOR WG 142, doi:10.13155/45915)."""

STANDARD_ATMOSPHERE = 101.325
"""[kPa]"""

PARTIAL_MOLAR_VOLUME = 0.317
"""Partial molar volume of O2 in seawater [m3 mol-1 Pa dbar-1] (Enns et al. 1965, J. Phys. Chem. 69:389)."""

GAS_CONSTANT = 8.314
"""[J mol-1 K-1], to the digits of SCOR WG 142."""

IPTS68_PER_ITS90 = 1.00024
"""Ratio of a temperature on IPTS-68 to the same on ITS-90 [1] (Saunders 1990, WOCE Newsletter 10)."""

# Garcia & Gordon 1992, Limnol. Oceanogr. 37:1307, eq. 8 without the A3*Ts**2 term (erratum: 38:656), table 1,
# Benson & Krause ml/l set, highest power first. The exponent of B2 is -2: copies with -3 circulate and agree at the
# classic check point (10 degC, S 35), so tests look elsewhere.
_SOLUBILITY_A = (3.88767, -0.256847, 4.94457, 4.05010, 3.22014, 2.00907)
_SOLUBILITY_B = (-8.17083e-3, -1.03410e-2, -7.37614e-3, -6.24523e-3)
_SOLUBILITY_C0 = -4.88682e-7


def _elementwise(function: Callable[..., Any]) -> Callable[..., Any]:
    """Let a plain-array function take numbers, masked arrays, xarray objects and dask arrays.

    Positional parameters are arrays, keyword-only ones are options. A parameter left at None stays None.
    """
    signature = inspect.signature(function)
    arrays = [p.name for p in signature.parameters.values() if p.kind is not p.KEYWORD_ONLY]

    @functools.wraps(function)
    def wrapper(*args: Any, **kwargs: Any) -> Any:
        bound = signature.bind(*args, **kwargs)
        bound.apply_defaults()
        given = [name for name in arrays if bound.arguments[name] is not None]
        fixed = {name: value for name, value in bound.arguments.items() if name not in given}

        def compute(*values: Any) -> Any:
            plain = {name: _plain(value) for name, value in zip(given, values, strict=True)}
            with np.errstate(all="ignore"):
                result = np.asarray(function(**plain, **fixed), dtype=float)
            # A formula may not need every argument (umol/kg needs no temperature); lazy arrays count on the full shape.
            shape = np.broadcast_shapes(*(value.shape for value in plain.values()))
            return (result if result.shape == shape else np.broadcast_to(result, shape).copy())[()]

        inputs = [bound.arguments[name] for name in given]
        if any(isinstance(value, xr.DataArray | xr.Variable | xr.Dataset) for value in inputs):
            return xr.apply_ufunc(compute, *inputs, dask="parallelized", output_dtypes=[float])
        if any(hasattr(value, "dask") for value in inputs):
            from dask.array.core import elemwise

            return elemwise(compute, *inputs, dtype=float)
        return compute(*inputs)

    return wrapper


def _plain(values: Any) -> np.ndarray:
    return np.ma.filled(np.ma.asarray(values, dtype=float), np.nan)


# --- depth, salinity and temperature kinds -----------------------------------------------------------------------


@_elementwise
def depth_from_pressure(pressure, latitude):
    """Depth [m, positive down] from sea pressure [dbar] and latitude [degrees north] (TEOS-10, gsw.z_from_p).

    Examples
    --------
    >>> round(float(depth_from_pressure(1000.0, 4.0)), 3)
    992.092
    """
    return -gsw.z_from_p(pressure, latitude)


@_elementwise
def pressure_from_depth(depth, latitude):
    """Sea pressure [dbar] from depth [m, positive down] and latitude [degrees north] (TEOS-10, gsw.p_from_z)."""
    return gsw.p_from_z(-depth, latitude)


@_elementwise
def absolute_salinity(salinity, pressure, longitude=None, latitude=None):
    """Absolute Salinity [g/kg] from practical salinity [1] (TEOS-10).

    Where the position is not given, or lies outside the atlas of composition anomalies (on land, south of 86 S), the
    Reference Salinity is returned: at most 0.03 g/kg away in the open ocean, 0.002 % of density.
    """
    reference = gsw.SR_from_SP(salinity)
    if longitude is None or latitude is None:
        return reference
    exact = gsw.SA_from_SP(salinity, pressure, longitude, latitude)
    return np.where(np.isnan(exact) & np.isfinite(pressure), reference, exact)


@_elementwise
def practical_salinity_from_absolute(absolute, pressure, longitude=None, latitude=None):
    """Practical salinity [1] from Absolute Salinity [g/kg] (TEOS-10); Reference Salinity where no position is known."""
    reference = gsw.SP_from_SR(absolute)
    if longitude is None or latitude is None:
        return reference
    exact = gsw.SP_from_SA(absolute, pressure, longitude, latitude)
    return np.where(np.isnan(exact) & np.isfinite(pressure), reference, exact)


@_elementwise
def its90_from_ipts68(temperature):
    """Temperature on ITS-90 [degC] from IPTS-68 [degC]: t68 / 1.00024 (Saunders 1990)."""
    return temperature / IPTS68_PER_ITS90


@_elementwise
def temperature_from_potential(potential, salinity, pressure, longitude=None, latitude=None):
    """In-situ temperature [degC] from potential temperature at 0 dbar [degC] (TEOS-10, gsw.pt_from_t reversed)."""
    absolute = absolute_salinity(salinity, pressure, longitude, latitude)
    return gsw.pt_from_t(absolute, potential, 0.0, pressure)


@_elementwise
def temperature_from_conservative(conservative, salinity, pressure, longitude=None, latitude=None):
    """In-situ temperature [degC] from Conservative Temperature [degC] (TEOS-10, gsw.t_from_CT)."""
    absolute = absolute_salinity(salinity, pressure, longitude, latitude)
    return gsw.t_from_CT(absolute, conservative, pressure)


@_elementwise
def potential_temperature(temperature, salinity, pressure, longitude=None, latitude=None):
    """Potential temperature at 0 dbar [degC] from in-situ temperature [degC] (TEOS-10, gsw.pt0_from_t)."""
    absolute = absolute_salinity(salinity, pressure, longitude, latitude)
    return gsw.pt0_from_t(absolute, temperature, pressure)


@_elementwise
def potential_density(temperature, salinity, pressure, longitude=None, latitude=None):
    """Potential density at 0 dbar [kg/m3] from in-situ temperature [degC] (TEOS-10, gsw.sigma0).

    A sample is brought to the surface before its oxygen is stated per volume, so this density, not the in-situ one,
    joins umol/l and umol/kg.
    """
    absolute = absolute_salinity(salinity, pressure, longitude, latitude)
    return 1000.0 + gsw.sigma0(absolute, gsw.CT_from_t(absolute, temperature, pressure))


# --- solubility and partial pressure -----------------------------------------------------------------------------


@_elementwise
def water_vapour_pressure(temperature, salinity):
    """Water vapour pressure over seawater [kPa] (Weiss & Price 1980, Mar. Chem. 8:347, eq. 10).

    Examples
    --------
    >>> round(float(water_vapour_pressure(10.0, 35.0)), 5)
    1.20347
    """
    hundreds = (temperature + ZERO_CELSIUS) / 100.0
    exponent = 24.4543 - 67.4509 / hundreds - 4.8489 * np.log(hundreds) - 0.000544 * salinity
    return STANDARD_ATMOSPHERE * np.exp(exponent)


@_elementwise
def solubility(temperature, salinity):
    """Oxygen at equilibrium with moist air of 1 atm [umol/kg].

    Garcia & Gordon 1992, Limnol. Oceanogr. 37:1307, eq. 8, Benson & Krause set (gsw.O2sol_SP_pt, which takes ITS-90).
    Give the in-situ temperature for partial pressure, the potential temperature for saturation.

    Examples
    --------
    >>> round(float(solubility(10.0 / 1.00024, 35.0)), 2)
    274.61
    """
    return gsw.O2sol_SP_pt(salinity, temperature)


@_elementwise
def solubility_per_volume(temperature, salinity):
    """Oxygen at equilibrium with moist air of 1 atm [umol/l], for waters of a chamber at the surface.

    Garcia & Gordon 1992, Limnol. Oceanogr. 37:1307, eq. 8, Benson & Krause ml/l set, times 44.6596 umol/ml.
    """
    scaled = np.log((298.15 - IPTS68_PER_ITS90 * temperature) / (ZERO_CELSIUS + IPTS68_PER_ITS90 * temperature))
    fresh, haline = np.polyval(_SOLUBILITY_A, scaled), np.polyval(_SOLUBILITY_B, scaled)
    return UMOL_PER_ML * np.exp(fresh + salinity * haline + _SOLUBILITY_C0 * salinity**2)


@_elementwise
def air_saturated_po2(temperature, salinity):
    """Oxygen partial pressure of water at equilibrium with moist air of 1 atm [kPa] (SCOR WG 142).

    Examples
    --------
    >>> round(float(air_saturated_po2(10.0, 35.0)), 3)
    20.971
    """
    return OXYGEN_MOLE_FRACTION * (STANDARD_ATMOSPHERE - water_vapour_pressure(temperature, salinity))


@_elementwise
def capacitance(temperature, salinity):
    """Oxygen that a litre of water gains per unit of partial pressure, at the surface [umol/l/kPa] (SCOR WG 142)."""
    return solubility_per_volume(temperature, salinity) / air_saturated_po2(temperature, salinity)


@_elementwise
def hydrostatic_factor(temperature, pressure):
    """Rise of oxygen partial pressure with sea pressure [1]: exp(V p / (R T)) (Enns et al. 1965; SCOR WG 142)."""
    return np.exp(PARTIAL_MOLAR_VOLUME * pressure / (GAS_CONSTANT * (temperature + ZERO_CELSIUS)))


@_elementwise
def po2_from_concentration(oxygen, temperature, salinity, pressure, *, hydrostatic=True):
    """Oxygen partial pressure [kPa] from oxygen concentration [umol/kg].

    ``PO2 = xO2 (P_atm - pH2O(t, S)) O2 / O2sol(S, t) exp(V p / (R T))``, SCOR WG 142 (doi:10.13155/45915), with the
    in-situ temperature in all three places.

    Parameters
    ----------
    oxygen : array-like
        Concentration [umol/kg].
    temperature : array-like
        In situ, ITS-90 [degC].
    salinity : array-like
        Practical salinity [1].
    pressure : array-like
        Sea pressure [dbar].
    hydrostatic : bool
        Whether to include the hydrostatic term, 1.4 % at 100 dbar and 15 % at 1000 dbar.

    Examples
    --------
    >>> round(float(po2_from_concentration(75.2, 9.2106, 34.8337, 367.8)), 4)
    5.9299
    """
    return oxygen * _kpa_per_umol_kg(temperature, salinity, pressure, hydrostatic)


@_elementwise
def concentration_from_po2(po2, temperature, salinity, pressure, *, hydrostatic=True):
    """Oxygen concentration [umol/kg] from partial pressure [kPa]; the inverse of `po2_from_concentration`."""
    return po2 / _kpa_per_umol_kg(temperature, salinity, pressure, hydrostatic)


def _kpa_per_umol_kg(temperature, salinity, pressure, hydrostatic):
    ratio = air_saturated_po2(temperature, salinity) / solubility(temperature, salinity)
    return ratio * hydrostatic_factor(temperature, pressure) if hydrostatic else ratio


@_elementwise
def concentration_at_saturation(temperature, salinity, pressure, longitude=None, latitude=None):
    """Oxygen the water would hold at equilibrium with air at the surface [umol/kg], from in-situ temperature [degC]."""
    return solubility(potential_temperature(temperature, salinity, pressure, longitude, latitude), salinity)


@_elementwise
def concentration_from(oxygen, temperature, salinity, pressure, longitude=None, latitude=None, *, unit):
    """Oxygen concentration [umol/kg] from oxygen in any common unit.

    Parameters
    ----------
    oxygen : array-like
        In `unit`.
    temperature, salinity, pressure : array-like
        In situ [degC], practical [1], sea pressure [dbar].
    longitude, latitude : array-like, optional
        For the density [degrees].
    unit : str
        umol/kg, umol/l, mmol/m3, mol/m3, ml/l, mg/l, % saturation, kPa, mbar, hPa, atm or mmHg, in any usual spelling.
        Volumes are those of the sample at the surface; partial pressures include the hydrostatic term.

    Raises
    ------
    UnitError
        The unit is unknown or not one of dissolved oxygen.
    """
    return _times_umol_kg(unit, temperature, salinity, pressure, longitude, latitude) * oxygen


@_elementwise
def concentration_to(oxygen, temperature, salinity, pressure, longitude=None, latitude=None, *, unit):
    """Oxygen in any common unit from concentration [umol/kg]; the inverse of `concentration_from`."""
    return oxygen / _times_umol_kg(unit, temperature, salinity, pressure, longitude, latitude)


def _times_umol_kg(unit, temperature, salinity, pressure, longitude, latitude):
    """Factor from `unit` to umol/kg for each sample."""
    meaning = oxygen_unit(unit)
    place = (temperature, salinity, pressure, longitude, latitude)
    if meaning.kind == "per mass":
        return meaning.factor
    if meaning.kind == "per volume":
        return meaning.factor * 1000.0 / potential_density(*place)  # 1000 l in a m3
    if meaning.kind == "saturation":
        return meaning.factor * concentration_at_saturation(*place)
    return meaning.factor / _kpa_per_umol_kg(temperature, salinity, pressure, hydrostatic=True)


def po2_from(oxygen, temperature, salinity, pressure, longitude=None, latitude=None, *, unit, hydrostatic=True):
    """Oxygen partial pressure [kPa] from oxygen in any common unit; see `concentration_from` for the parameters.

    Examples
    --------
    >>> round(float(po2_from(6.0, 10.0, 35.0, 0.0, unit="ml/l")), 2)
    19.93
    """
    concentration = concentration_from(oxygen, temperature, salinity, pressure, longitude, latitude, unit=unit)
    return po2_from_concentration(concentration, temperature, salinity, pressure, hydrostatic=hydrostatic)


def po2_to(po2, temperature, salinity, pressure, longitude=None, latitude=None, *, unit, hydrostatic=True):
    """Oxygen in any common unit from partial pressure [kPa]; the inverse of `po2_from`."""
    concentration = concentration_from_po2(po2, temperature, salinity, pressure, hydrostatic=hydrostatic)
    return concentration_to(concentration, temperature, salinity, pressure, longitude, latitude, unit=unit)
