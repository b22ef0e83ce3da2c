"""Bands of one species, written where the user asked: table, netCDF file or standard output."""

import sys
from collections.abc import Mapping, Sequence
from pathlib import Path

import pandas as pd
import xarray as xr

from habitat import tables
from habitat.errors import InputError, OutputError
from habitat.files import atomic_path
from habitat.gridfile import cf_dataset, write_grid
from habitat.ocean import open_ocean
from habitat.ocean.recognise import reading_errors
from habitat.species import Species, read_species
from habitat.viability import band_table, chance_of_viability, column_totals


def write_bands(
    ocean: Sequence[str | Path],
    species_file: str | Path,
    activities: Sequence[float],
    out: Path | None,
    *,
    choose: Mapping[str, str],
    hydrostatic: bool,
    uncertainty: bool,
    chance: bool,
) -> None:
    """Find the viable bands of ocean files and write them.

    Parameters
    ----------
    ocean : sequence of path
        Files of casts, or of one grid.
    species_file : path
    activities : sequence of float
        Activity factors [1].
    out : Path or None
        A name ending in ``.nc`` for a grid as netCDF, in ``.csv`` for a table; None for standard output: aligned on a
        terminal, CSV in a pipe.
    choose, hydrostatic
        See `habitat.ocean.open_ocean` and `habitat.viability.oxygen_pressure`.
    uncertainty, chance : bool
        What to add to a netCDF file.

    Raises
    ------
    InputError, OutputError
        An input cannot be used, or the output not be written; netCDF is asked for casts, or a table is to hold what
        only a grid can.
    """
    species = read_species(species_file)
    ending = out.suffix.lower() if out is not None else None
    if ending not in (None, ".csv", ".nc"):
        raise OutputError(f"a name ending in '{ending}'", where=str(out), expected="a name ending in .csv or .nc")
    if (uncertainty or chance) and ending != ".nc":
        raise InputError(
            "--uncertainty and --chance add to a netCDF grid only",
            remedy="add --out FILE.nc, or leave them out: a table has quantile edges in any case",
        )
    if out is not None and not out.parent.is_dir():
        raise OutputError("the folder does not exist", where=str(out.parent), remedy="create it, or choose another")
    columns = open_ocean(ocean, choose=choose)
    reading = reading_errors(", ".join(columns.attrs["sources"]))  # lazy input fails only when it is read
    if out is not None and ending == ".nc":
        if columns.attrs["form"] != "grid":
            raise InputError("casts have any number of bands each", where=str(out), expected="a .csv file for casts")
        with reading:
            write_grid(_grid(columns, species, activities, hydrostatic, uncertainty, chance), out)
        return
    with reading:
        table = band_table(columns, species, activities, hydrostatic=hydrostatic)
    if out is not None:
        with atomic_path(out) as temporary:
            tables.write_csv(table, temporary)
    elif sys.stdout.isatty():
        sys.stdout.write(_aligned(table) + "\n")
    else:
        sys.stdout.write(tables.csv(table))


def _grid(
    columns: xr.Dataset,
    species: Species,
    activities: Sequence[float],
    hydrostatic: bool,
    uncertainty: bool,
    chance: bool,
) -> xr.Dataset:
    result = column_totals(columns, species, activities, uncertainty=uncertainty, hydrostatic=hydrostatic)
    if chance:
        result["chance"] = chance_of_viability(columns, species, activities, hydrostatic=hydrostatic)
        result = result.assign_coords(depth=columns["depth"])
    term = "with" if hydrostatic else "without"
    return cf_dataset(
        result,
        title=f"viable bands of {species.name}",
        source=", ".join(columns.attrs["sources"]),
        comment=f"PO2 {term} the hydrostatic term. Viable water is where the animal could breathe, not where it is.",
    )


def _aligned(table: pd.DataFrame) -> str:
    """Lay out what fits a terminal: the edges and how sure they are."""
    shown = pd.DataFrame(
        {
            "cast": table["cast"],
            "activity": table["activity"],
            "band": table["band"],
            "upper m": [
                _edge(*row) for row in table[["upper_m", "upper_m_p05", "upper_m_p95", "upper_edge"]].to_numpy()
            ],
            "lower m": [
                _edge(*row) for row in table[["lower_m", "lower_m_p05", "lower_m_p95", "lower_edge"]].to_numpy()
            ],
            "thickness m": [f"{value:.0f}" if value == value else "" for value in table["thickness_m"]],
            "least PO2 kPa": [f"{value:.2f}" if value == value else "" for value in table["least_po2_kpa"]],
            "flags": table["flags"],
        }
    )
    return tables.plain(shown)


def _edge(middle: float, low: float, high: float, kind: str) -> str:
    if pd.isna(middle):
        return ""
    spread = "" if pd.isna(low) and pd.isna(high) else f" ({_metres(low)}-{_metres(high)})"
    return f"{_metres(middle)}{spread} {kind}"


def _metres(value: float) -> str:
    return "?" if pd.isna(value) else f"{value:.0f}"
