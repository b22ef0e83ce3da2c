"""From measured physiology and ocean files to the depths where an animal can breathe."""

import importlib

_HOMES = {
    "HabitatError": "errors",
    "InputError": "errors",
    "OutputError": "errors",
    "Response": "species",
    "Scenario": "scenario",
    "Species": "species",
    "UnitError": "errors",
    "apply": "scenario",
    "band_table": "viability",
    "chance_of_viability": "viability",
    "column_totals": "viability",
    "drawn_totals": "viability",
    "inspect": "ocean",
    "open_ocean": "ocean",
    "oxygen_pressure": "viability",
    "read_species": "species",
    "run_study": "study",
    "write_species": "species",
}

__all__ = sorted(_HOMES)


def __getattr__(name: str) -> object:
    """Import a public name when it is first used, so that `habitat --help` need not load the libraries."""
    if name not in _HOMES:
        msg = f"module 'habitat' has no attribute '{name}'"
        raise AttributeError(msg)
    return getattr(importlib.import_module(f"habitat.{_HOMES[name]}"), name)


def __dir__() -> list[str]:
    return __all__
