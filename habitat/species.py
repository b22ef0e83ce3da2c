"""An animal's physiology: critical oxygen partial pressure, metabolic index, and how sure they are.

Both the resting metabolic rate and the oxygen supply capacity follow ``value exp(E x)`` with
``x = (1/T0 - 1/T) / kB``; their quotient is the critical oxygen partial pressure, ``Pcrit(T) = rate(T) / alpha(T)``
(J. Exp. Biol. 224, jeb242210, doi:10.1242/jeb.242210), and ``Phi = PO2 / Pcrit(T)`` is the metabolic index (Deutsch
et al. 2020, Nature 585:557, doi:10.1038/s41586-020-2721-y). The four parameters (ln alpha, ln rate, E_alpha, E_rate)
are jointly Gaussian, so ln Pcrit is Gaussian at every temperature and the chance of viability is one normal CDF.

Temperatures are in situ in degC and partial pressures in kPa; both may be numbers, numpy
arrays or xarray objects, lazy or not.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import tomli_w
import xarray as xr
from pydantic import Field, field_validator, model_validator
from scipy.special import ndtr, ndtri
from scipy.stats import qmc

from habitat.errors import InputError
from habitat.files import atomic_path, read_toml
from habitat.schema import Table, validate
from habitat.units import ZERO_CELSIUS, factor

BOLTZMANN = 8.617333262e-5
"""[eV/K] (CODATA 2018)"""

PARAMETERS = ("ln_supply_capacity", "ln_resting_rate", "supply_energy", "resting_energy")
"""Order of the rows and columns of a species' covariance."""

SUPPLY_UNIT = "umol/g/h/kPa"
RATE_UNIT = "umol/g/h"


@dataclass(frozen=True)
class Response:
    """How a rate changes with temperature and body mass.

    Attributes
    ----------
    value : float
        At the reference temperature and body mass [umol/g/h, or umol/g/h/kPa for a supply capacity].
    activation_energy : float
        Slope of ln(rate) against (1/T0 - 1/T)/kB [eV]; may be negative.
    mass_exponent : float
        Power of body mass, mass-specific [1].
    """

    value: float
    activation_energy: float
    mass_exponent: float = 0.0


@dataclass(frozen=True)
class Species:
    """An animal's physiology and its uncertainty.

    Attributes
    ----------
    name : str
    reference_temperature : float
        T0 [degC].
    supply_capacity, resting_rate : Response
        Oxygen supply capacity alpha [umol/g/h/kPa] and resting metabolic rate [umol/g/h].
    temperature_range : tuple of float, optional
        Lowest and highest temperature at which the animal was measured [degC].
    body_mass : float, optional
        The mass for which the values hold [g].
    covariance : tuple of 4 tuples of 4 floats, optional
        Of the parameters in the order of `PARAMETERS`; None means that no uncertainty is known.
    provenance : dict
        Where the numbers came from.

    Examples
    --------
    >>> prawn = Species("Example prawn", 10.0, Response(1.10, 0.30), Response(2.40, 0.62))
    >>> round(float(prawn.pcrit(10.0)), 4)
    2.1818
    >>> round(float(prawn.metabolic_index(4.0, 10.0)), 4)
    1.8333
    """

    name: str
    reference_temperature: float
    supply_capacity: Response
    resting_rate: Response
    temperature_range: tuple[float, float] | None = None
    body_mass: float | None = None
    covariance: tuple[tuple[float, ...], ...] | None = None
    provenance: dict[str, Any] = field(default_factory=dict)

    def inverse_temperature(self, temperature: Any) -> Any:
        """Arrhenius variable x = (1/T0 - 1/T)/kB [1/eV] of a temperature [degC]."""
        reference = self.reference_temperature + ZERO_CELSIUS
        return (1.0 / reference - 1.0 / (temperature + ZERO_CELSIUS)) / BOLTZMANN

    def pcrit(self, temperature: Any, quantile: float = 0.5) -> Any:
        """Critical oxygen partial pressure of the resting animal [kPa].

        Parameters
        ----------
        temperature : array-like
            In situ [degC].
        quantile : float
            Which quantile of what the trials leave uncertain; 0.5 is the estimate itself.
        """
        shift = 0.0
        if quantile != 0.5 and self.covariance:
            shift = ndtri(quantile) * self.log_pcrit_sd(temperature)
        return self._pcrit(temperature, shift)

    def pcrit_of_draw(self, temperature: Any, draw: Sequence[float]) -> Any:
        """Critical oxygen partial pressure [kPa] of one draw of the physiology, see `draws`."""
        return self._pcrit(temperature, *draw)

    def _pcrit(self, temperature: Any, log_shift: Any, energy_shift: float = 0.0) -> Any:
        energy = self.resting_rate.activation_energy - self.supply_capacity.activation_energy + energy_shift
        ratio = self.resting_rate.value / self.supply_capacity.value
        return ratio * np.exp(energy * self.inverse_temperature(temperature) + log_shift)

    def log_pcrit_sd(self, temperature: Any) -> Any:
        """Give the standard deviation of ln Pcrit [1], sqrt(g' C g) with g = (-1, 1, -x, x); 0 where none is known."""
        x = self.inverse_temperature(temperature)
        level, cross, slope = self._log_pcrit_covariance()
        return np.sqrt(np.maximum(level + 2.0 * cross * x + slope * x * x, 0.0))

    def _log_pcrit_covariance(self) -> tuple[float, float, float]:
        """Variance of ln Pcrit(T0), its covariance with E_rate - E_alpha, and the variance of that difference."""
        if self.covariance is None:
            return 0.0, 0.0, 0.0
        difference = np.array([[-1.0, 1.0, 0.0, 0.0], [0.0, 0.0, -1.0, 1.0]])
        reduced = difference @ np.array(self.covariance) @ difference.T
        return float(reduced[0, 0]), float(reduced[0, 1]), float(reduced[1, 1])

    def metabolic_index(self, po2: Any, temperature: Any) -> Any:
        """Phi = PO2 / Pcrit(T) of the resting animal [1]."""
        return po2 / self.pcrit(temperature)

    def chance(self, po2: Any, temperature: Any, activity: float = 1.0) -> Any:
        """Chance of viability [1]: probability that PO2 is at least activity x Pcrit(T).

        Exact: ``NormalCDF((ln PO2 - ln(activity Pcrit)) / sd)``; a step from 0 to 1 where no uncertainty is known.
        NaN in, NaN out.
        """
        needed = activity * self.pcrit(temperature)
        deviation = self.log_pcrit_sd(temperature)
        return xr.apply_ufunc(_chance, po2, needed, deviation, dask="parallelized", output_dtypes=[float])

    def draws(self, count: int = 128) -> np.ndarray:
        """Quasi-random draws of what the trials leave uncertain.

        Only two combinations of the four parameters move Pcrit: ln(rate/alpha) at T0 and E_rate - E_alpha.

        Parameters
        ----------
        count : int
            A power of 2.

        Returns
        -------
        numpy.ndarray
            Shape (count, 2): shift of ln Pcrit(T0) [1], shift of E_rate - E_alpha [eV]. The points are a Sobol sequence
            moved to the middle of its cells, the same in every run.
        """
        points = qmc.Sobol(d=2, scramble=False).random(count) + 0.5 / count
        level, cross, slope = self._log_pcrit_covariance()
        deviation = np.sqrt(level)
        shared = cross / deviation if deviation else 0.0
        root = np.array(
            [[deviation, 0.0], [shared, np.sqrt(max(slope - shared**2, 0.0))]]
        )  # Cholesky, by hand: C may be singular
        return ndtri(points) @ root.T

    def at_mass(self, mass: float) -> "Species":
        """Return the same animal at another body mass [g], scaled by the mass exponents.

        Raises
        ------
        InputError
            The species has no body mass or no mass exponent, or `mass` is not positive.
        """
        exponents = (self.supply_capacity.mass_exponent, self.resting_rate.mass_exponent)
        if not mass > 0:
            raise InputError(f"body mass {mass} g", where=self.name, expected="a positive number of grams")
        if self.body_mass is None or exponents == (0.0, 0.0):
            raise InputError(
                f"a body mass of {mass} g is asked for, but the species file does not say how the values scale",
                where=self.name,
                remedy="add body_mass, and mass_exponent in [supply_capacity] and [resting_rate]",
            )
        ratio = mass / self.body_mass
        return replace(self, body_mass=mass, supply_capacity=_scaled(self.supply_capacity, ratio),
                       resting_rate=_scaled(self.resting_rate, ratio))  # fmt: skip


def _scaled(response: Response, ratio: float) -> Response:
    return replace(response, value=response.value * ratio**response.mass_exponent)


def _chance(po2: np.ndarray, needed: np.ndarray, deviation: np.ndarray) -> np.ndarray:
    with np.errstate(divide="ignore", invalid="ignore"):
        log_ratio = np.log(np.maximum(po2, 0.0) / needed)
        smooth = ndtr(log_ratio / deviation)
    step = np.where(np.isnan(log_ratio), np.nan, (log_ratio >= 0).astype(float))
    return np.where(deviation > 0, smooth, step)


# --- the species file --------------------------------------------------------------------------------------------


class _ResponseTable(Table):
    value: float = Field(gt=0)
    unit: str
    activation_energy: float = Field(ge=-3, le=3)
    mass_exponent: float = Field(default=0.0, ge=-2, le=2)


class _UncertaintyTable(Table):
    order: list[str]
    covariance: list[list[float]]

    @field_validator("order")
    @classmethod
    def _all_parameters(cls, order: list[str]) -> list[str]:
        if sorted(order) != sorted(PARAMETERS):
            msg = f"found {order}; expected each of {list(PARAMETERS)} once"
            raise ValueError(msg)
        return order

    @field_validator("covariance")
    @classmethod
    def _is_covariance(cls, rows: list[list[float]]) -> list[list[float]]:
        if [len(row) for row in rows] != [4] * 4:
            msg = f"found rows of {[len(row) for row in rows]} numbers; expected 4 rows of 4"
            raise ValueError(msg)
        matrix = np.array(rows)
        scale = np.abs(matrix).max()
        i, j = np.unravel_index(np.abs(matrix - matrix.T).argmax(), (4, 4))
        if abs(matrix[i, j] - matrix[j, i]) > 1e-9 * scale:
            msg = (
                f"not symmetric: row {i + 1}, column {j + 1} holds {matrix[i, j]} but row {j + 1}, "
                f"column {i + 1} holds {matrix[j, i]}; make them equal"
            )
            raise ValueError(msg)
        least = np.linalg.eigvalsh(matrix).min()
        if least < -1e-9 * scale:
            msg = (
                f"not positive semi-definite (smallest eigenvalue {least:.3g}): no set of uncertain numbers has this "
                "covariance; check signs and sizes of the terms off the diagonal"
            )
            raise ValueError(msg)
        return rows


class _SpeciesTable(Table):
    name: str = Field(min_length=1)
    reference_temperature: float = Field(ge=-5, le=50)
    temperature_range: list[float] | None = None
    body_mass: float | None = Field(default=None, gt=0)
    supply_capacity: _ResponseTable
    resting_rate: _ResponseTable
    uncertainty: _UncertaintyTable | None = None
    provenance: dict[str, Any] = Field(default_factory=dict)

    @field_validator("temperature_range")
    @classmethod
    def _two_rising(cls, limits: list[float] | None) -> list[float] | None:
        if limits is not None and (len(limits) != 2 or limits[0] >= limits[1]):
            msg = f"found {limits}; expected [lowest, highest] in degC"
            raise ValueError(msg)
        return limits

    @model_validator(mode="after")
    def _mass_is_known(self) -> "_SpeciesTable":
        if self.body_mass is None and (self.supply_capacity.mass_exponent or self.resting_rate.mass_exponent):
            msg = "mass_exponent is given without body_mass; add body_mass, the mass in g for which the values hold"
            raise ValueError(msg)
        return self


def read_species(path: str | Path) -> Species:
    """Read and check a species file.

    Raises
    ------
    InputError
        The file is missing or not TOML, a key is missing, unknown or holds an impossible value, or the covariance is
        not symmetric and positive semi-definite.
    UnitError
        A unit is unknown or of the wrong kind.
    """
    where = str(path)
    table = validate(_SpeciesTable, read_toml(path), where)
    return Species(
        name=table.name,
        reference_temperature=table.reference_temperature,
        supply_capacity=_response(table.supply_capacity, SUPPLY_UNIT, f"{where}, [supply_capacity]"),
        resting_rate=_response(table.resting_rate, RATE_UNIT, f"{where}, [resting_rate]"),
        temperature_range=tuple(table.temperature_range) if table.temperature_range else None,
        body_mass=table.body_mass,
        covariance=_in_our_order(table.uncertainty) if table.uncertainty else None,
        provenance=dict(table.provenance),
    )


def write_species(species: Species, path: str | Path) -> None:
    """Write a species file; reading it back gives an equal `Species`.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    content: dict[str, Any] = {"name": species.name, "reference_temperature": species.reference_temperature}
    if species.temperature_range is not None:
        content["temperature_range"] = list(species.temperature_range)
    if species.body_mass is not None:
        content["body_mass"] = species.body_mass
    blocks = (
        ("supply_capacity", species.supply_capacity, SUPPLY_UNIT),
        ("resting_rate", species.resting_rate, RATE_UNIT),
    )
    for key, response, unit in blocks:
        content[key] = {"value": response.value, "unit": unit, "activation_energy": response.activation_energy}
        if response.mass_exponent:
            content[key]["mass_exponent"] = response.mass_exponent
    if species.covariance is not None:
        rows = [list(row) for row in species.covariance]
        content["uncertainty"] = {"order": list(PARAMETERS), "covariance": rows}
    if species.provenance:
        content["provenance"] = species.provenance
    with atomic_path(path) as temporary:
        temporary.write_text(tomli_w.dumps(content), encoding="utf-8")


def _response(table: _ResponseTable, unit: str, where: str) -> Response:
    try:
        scale = factor(table.unit, unit)
    except InputError as error:
        raise type(error)(
            f"unit = '{table.unit}' cannot be used", where=where, expected=f"a unit such as {unit}"
        ) from None
    return Response(table.value * scale, table.activation_energy, table.mass_exponent)


def _in_our_order(table: _UncertaintyTable) -> tuple[tuple[float, ...], ...]:
    places = [table.order.index(name) for name in PARAMETERS]
    return tuple(tuple(table.covariance[i][j] for j in places) for i in places)
