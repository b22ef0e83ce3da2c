"""A study from its file to the finished output folder."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import dask
import pandas as pd
import xarray as xr

from habitat import report, scenario, tables, viability
from habitat.gridfile import cf_dataset, write_grid
from habitat.ocean import open_ocean
from habitat.ocean.recognise import reading_errors
from habitat.output import output_folder
from habitat.pictures import Results, count_pictures, draw
from habitat.progress import Steps, steps
from habitat.studyfile import BASELINE, Animal, Study, read_study

LARGEST_BAND_TABLE = 10_000
"""Grids of more columns have no bands.csv; their bands are in bands.nc."""


def run_study(path: str | Path, folder: str | Path | None = None) -> Path:
    """Run a study and write its results.

    Parameters
    ----------
    path : str or Path
        The study file.
    folder : str or Path, optional
        For the results, instead of the one that the study names.

    Returns
    -------
    Path
        The output folder, which holds bands.csv, findings.csv, .md, .tex and .xlsx, bands.nc for grids, figures/,
        methods.md and run.json. It is complete, or as it was before.

    Raises
    ------
    InputError
        The study, or a file that it names, cannot be used.
    OutputError
        The results cannot be written.
    """
    study = read_study(path)
    target = Path(folder) if folder is not None else study.folder
    columns = open_ocean(study.ocean_files, choose=study.choose, keep_flags=study.keep_flags or None)
    pictures = count_pictures(study, columns) if study.figures else 0
    with output_folder(target) as temporary, steps(2 + len(study.scenarios) + pictures) as progress:
        _run(study, columns, temporary, progress)
    return target


def _run(study: Study, columns: xr.Dataset, folder: Path, progress: Steps) -> None:
    oceans = {BASELINE: columns}
    computed = {}
    progress.step(BASELINE)
    computed[BASELINE] = _compute(study, BASELINE, columns)
    scenario_records = []
    for change in study.scenarios:
        progress.step(change.name)
        oceans[change.name] = scenario.apply(columns, change)
        computed[change.name] = _compute(study, change.name, oceans[change.name])
        counts = computed[change.name]["counts"]
        effects = scenario.rule_effects(columns, change, hydrostatic=study.hydrostatic)
        scenario_records.append(report.scenario_record(change, counts, effects))
    progress.step("tables")
    record = report.run_record(study, columns, scenario_records)
    results = [_results(animal, computed) for animal in study.animals]
    _write_tables(study, columns, computed, results, record, folder)
    if study.figures:
        (folder / "figures").mkdir()
        for title in draw(study, oceans, results, folder / "figures"):
            progress.step(title)
    report.write_methods(record, folder / "methods.md")
    report.write_record(record, folder)


def _compute(study: Study, name: str, columns: xr.Dataset) -> dict[str, Any]:
    """Everything that one ocean gives for all animals, in one pass over lazy input.

    Keys: "counts" (of the scenario) and each animal's name, with (totals, draws or None, band table or None).
    """
    lazy: dict[str, Any] = {}
    small = columns.attrs["form"] == "casts" or _column_count(columns) <= LARGEST_BAND_TABLE
    for animal in study.animals:
        known = animal.species.covariance is not None
        arguments = (columns, animal.species, animal.activities)
        lazy[animal.species.name] = (
            viability.column_totals(*arguments, uncertainty=known, hydrostatic=study.hydrostatic),
            viability.drawn_totals(*arguments, count=study.draws, hydrostatic=study.hydrostatic) if known else None,
        )
    counts = xr.Dataset({key: columns[key] for key in ("clipped_samples", "lost_samples") if key in columns})
    counts.attrs = dict(columns.attrs)
    with reading_errors(", ".join(columns.attrs["sources"])):  # lazy netCDF input fails only when it is read
        done, counts = dask.compute(lazy, counts)
        for animal in study.animals:
            arguments = (columns, animal.species, animal.activities)
            table = viability.band_table(*arguments, scenario=name, hydrostatic=study.hydrostatic) if small else None
            done[animal.species.name] = (*done[animal.species.name], table)
    return done | {"counts": counts}


def _column_count(columns: xr.Dataset) -> int:
    return columns["oxygen"].size // columns.sizes["level"]


def _results(animal: Animal, computed: Mapping[str, Mapping[str, Any]]) -> Results:
    name = animal.species.name
    each = {ocean: done[name] for ocean, done in computed.items()}
    listed = [table for _, _, table in each.values() if table is not None]
    table = pd.concat(listed, ignore_index=True) if listed else None
    return Results(animal, {ocean: totals for ocean, (totals, _, _) in each.items()}, table)


def _write_tables(
    study: Study,
    columns: xr.Dataset,
    computed: Mapping[str, Mapping[str, Any]],
    results: list[Results],
    record: Mapping[str, Any],
    folder: Path,
) -> None:
    findings = []
    for result in results:
        name = result.animal.species.name
        drawn = {ocean: done[name][1] for ocean, done in computed.items()}
        drawn = None if any(draws is None for draws in drawn.values()) else drawn
        findings.append(tables.regional_findings(columns, result.totals, drawn, list(study.regions), name))
    table = pd.concat(findings, ignore_index=True)
    note = _note(study, record)
    paged = tables.report_table(table)
    tables.write_csv(table, folder / "findings.csv")
    tables.write_xlsx(table, tables.FINDINGS_COLUMNS, note, folder / "findings.xlsx")
    (folder / "findings.md").write_text(f"# {study.title}\n\n{tables.markdown(paged)}\n{note}\n", encoding="utf-8")
    title = " ".join(study.title.split())  # a second line would not be a comment
    (folder / "findings.tex").write_text(f"% {title}\n% {note}\n{tables.latex(paged)}", encoding="utf-8")
    if all(result.bands is not None for result in results):
        bands = pd.concat([result.bands for result in results], ignore_index=True)
        tables.write_csv(bands, folder / "bands.csv")
    if columns.attrs["form"] == "grid":
        write_grid(_grid(study, results, note), folder / "bands.nc")


def _note(study: Study, record: Mapping[str, Any]) -> str:
    """Say what must be known to read a table."""
    term = "with" if study.hydrostatic else "without"
    return (
        f"Depths in m, positive downward. Ranges over the columns tell how different the places are; physiology ranges "
        f"are what the trials leave uncertain. PO2 {term} the hydrostatic term. Viable water is where the measured "
        f"animal could breathe, not where it is. habitat {record['program']['version']}; details in methods.md."
    )


def _grid(study: Study, results: list[Results], note: str) -> xr.Dataset:
    """Totals of all animals and oceans in one Dataset with dimensions species, scenario, activity."""
    each = [
        xr.concat(list(result.totals.values()), pd.Index(list(result.totals), name="scenario"), join="exact")
        for result in results
    ]
    names = pd.Index([result.animal.species.name for result in results], name="species")
    totals = xr.concat(each, names, join="outer")  # animals may have different activities
    source = ", ".join(study.ocean_files)
    return cf_dataset(totals, title=study.title, source=source, comment=note)
