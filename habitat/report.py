"""The record of a run, for machines (run.json) and for a paper (methods.md)."""

import json
import platform
from collections.abc import Mapping
from importlib.metadata import version
from pathlib import Path
from typing import Any

import jinja2
import numpy as np
import pandas as pd
import xarray as xr

from habitat import bands, seawater, species
from habitat.files import sha256
from habitat.output import PROGRAM, RECORD
from habitat.regions import Region
from habitat.scenario import Scenario, describe_oxygen, describe_warming
from habitat.studyfile import Animal, Study

LIBRARIES = ("numpy", "scipy", "xarray", "gsw", "pandas", "dask", "netCDF4", "matplotlib")


def run_record(study: Study, columns: xr.Dataset, scenarios: list[dict[str, Any]]) -> dict[str, Any]:
    """Gather what a reader needs to judge and repeat a run.

    Parameters
    ----------
    study : Study
    columns : xarray.Dataset
        Water columns of the baseline.
    scenarios : list of dict
        One `scenario_record` each.
    """
    return {
        "title": study.title,
        "program": {"name": PROGRAM, "version": version(PROGRAM)},
        "python": platform.python_version(),
        "libraries": {name: version(name) for name in LIBRARIES},
        "study": {"file": str(study.file), "sha256": sha256(study.file)},
        "hydrostatic": study.hydrostatic,
        "draws": study.draws,
        "constants": {
            "oxygen_mole_fraction": seawater.OXYGEN_MOLE_FRACTION,
            "standard_atmosphere_kpa": seawater.STANDARD_ATMOSPHERE,
            "partial_molar_volume_m3_mol_pa_dbar": seawater.PARTIAL_MOLAR_VOLUME,
            "gas_constant_j_mol_k": seawater.GAS_CONSTANT,
            "boltzmann_ev_k": species.BOLTZMANN,
        },
        "rules": {
            "surface_within_m": bands.SURFACE_WITHIN,
            "join_within_m": bands.JOIN_WITHIN,
            "seabed_within_m": bands.SEABED_WITHIN,
        },
        "animals": [_animal(animal) for animal in study.animals],
        "ocean": {
            "form": columns.attrs["form"],
            "columns": int(columns["oxygen"].size / columns.sizes["level"]),
            "levels": int(columns.sizes["level"]),
            **{key: columns.attrs[key] for key in ("sources", "conversions", "discarded", "suspicious")},
        },
        "scenarios": scenarios,
        "regions": [_region(region) for region in study.regions],
    }


def scenario_record(scenario: Scenario, changed: xr.Dataset, effects: pd.DataFrame) -> dict[str, Any]:
    """Gather what a scenario did to the ocean; `changed` must be computed, not lazy, in its counts."""
    return {
        "name": scenario.name,
        "warming": describe_warming(scenario.warming),
        "oxygen": describe_oxygen(scenario.oxygen),
        "clipped_samples": int(changed["clipped_samples"]),
        "lost_samples": int(changed["lost_samples"]),
        "notes": changed.attrs["notes"],
        "effects": effects.to_dict("records"),
    }


def write_methods(record: Mapping[str, Any], path: Path) -> None:
    """Write the methods of a run as Markdown."""
    loader = jinja2.FileSystemLoader(Path(__file__).parent)
    environment = jinja2.Environment(loader=loader, undefined=jinja2.StrictUndefined, autoescape=False)
    environment.filters["sentence"] = lambda text: text[:1].upper() + text[1:]
    path.write_text(environment.get_template("methods.md.j2").render(record), encoding="utf-8")


def write_record(record: Mapping[str, Any], folder: Path) -> None:
    """Write run.json with the checksums of all other files in the output folder; the last thing a run does."""
    outputs = {str(file.relative_to(folder)): sha256(file) for file in sorted(folder.rglob("*")) if file.is_file()}
    text = json.dumps(dict(record) | {"outputs": outputs}, indent=2, ensure_ascii=False, default=_plain)
    (folder / RECORD).write_text(text + "\n", encoding="utf-8")


def _animal(animal: Animal) -> dict[str, Any]:
    kind = animal.species
    return {
        "name": kind.name,
        "file": str(animal.file),
        "sha256": sha256(animal.file),
        "activities": list(animal.activities),
        "reference_temperature": kind.reference_temperature,
        "temperature_range": kind.temperature_range,
        "body_mass": kind.body_mass,
        "supply_capacity": vars(kind.supply_capacity),
        "resting_rate": vars(kind.resting_rate),
        "covariance": kind.covariance and [list(row) for row in kind.covariance],
        "provenance": kind.provenance,
    }


def _region(region: Region) -> str:
    return region.name if region.shape is None else f"{region.name}: {region.shape.wkt}"


def _plain(value: Any) -> Any:
    if isinstance(value, np.generic):
        return value.item()
    return str(value)
