"""A study from its file to the finished output folder."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import dask
import pandas as pd
import xarray as xr

from habitat import report, scenario, tables, viability
from habitat.findings import FINDINGS_COLUMNS, RegionalValues, findings_table, regional_values
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
    progress.step(BASELINE)
    answers = {BASELINE: _answers(study, BASELINE, columns)}
    scenario_records = []
    for change in study.scenarios:
        progress.step(change.name)
        oceans[change.name] = scenario.apply(columns, change)
        answers[change.name] = _answers(study, change.name, oceans[change.name])
        counts = oceans[change.name][["clipped_samples", "lost_samples"]].compute()
        effects = scenario.rule_effects(columns, change, hydrostatic=study.hydrostatic)
        scenario_records.append(report.scenario_record(change, counts, effects))
    progress.step("tables")
    record = report.run_record(study, columns, scenario_records)
    results = [_results(animal, answers) for animal in study.animals]
    _write_tables(study, columns, answers, results, record, folder)
    if study.figures:
        (folder / "figures").mkdir()
        for title in draw(study, oceans, results, folder / "figures"):
            progress.step(title)
    report.write_methods(record, folder / "methods.md")
    report.write_record(record, folder)


@dataclass(frozen=True)
class _Answer:
    """What one ocean gives for one animal; draws are kept as regional values only, for they fill the memory."""

    totals: xr.Dataset
    values: RegionalValues
    drawn: RegionalValues | None
    bands: pd.DataFrame | None


def _answers(study: Study, name: str, columns: xr.Dataset) -> dict[str, _Answer]:
    """Name of each animal to what this ocean gives for it; lazy input is read once an animal."""
    listed = columns.attrs["form"] == "casts" or _column_count(columns) <= LARGEST_BAND_TABLE
    with reading_errors(", ".join(columns.attrs["sources"])):  # lazy netCDF input fails only when it is read
        return {animal.species.name: _answer(study, name, columns, animal, listed) for animal in study.animals}


def _answer(study: Study, name: str, columns: xr.Dataset, animal: Animal, listed: bool) -> _Answer:
    arguments = (columns, animal.species, animal.activities)
    term = {"hydrostatic": study.hydrostatic}
    uncertain = animal.species.covariance is not None
    totals, drawn = dask.compute(
        viability.column_totals(*arguments, uncertainty=uncertain, **term),
        viability.drawn_totals(*arguments, count=study.draws, **term) if uncertain else None,
    )
    return _Answer(
        totals=totals,
        values=regional_values(columns, totals, study.regions),
        drawn=None if drawn is None else regional_values(columns, drawn, study.regions),
        bands=viability.band_table(*arguments, scenario=name, **term) if listed else None,
    )


def _column_count(columns: xr.Dataset) -> int:
    return columns["oxygen"].size // columns.sizes["level"]


def _results(animal: Animal, answers: Mapping[str, Mapping[str, _Answer]]) -> Results:
    each = {ocean: given[animal.species.name] for ocean, given in answers.items()}
    listed = [answer.bands for answer in each.values() if answer.bands is not None]
    table = pd.concat(listed, ignore_index=True) if listed else None
    return Results(animal, {ocean: answer.totals for ocean, answer in each.items()}, table)


def _write_tables(
    study: Study,
    columns: xr.Dataset,
    answers: Mapping[str, Mapping[str, _Answer]],
    results: list[Results],
    record: Mapping[str, Any],
    folder: Path,
) -> None:
    findings = []
    for result in results:
        name = result.animal.species.name
        given = {ocean: each[name] for ocean, each in answers.items()}
        drawn = {ocean: answer.drawn for ocean, answer in given.items() if answer.drawn is not None}
        findings.append(findings_table({ocean: answer.values for ocean, answer in given.items()}, drawn or None, name))
    table = pd.concat(findings, ignore_index=True)
    note = _note(study, record)
    paged = tables.report_table(table)
    tables.write_csv(table, folder / "findings.csv")
    tables.write_xlsx(table, FINDINGS_COLUMNS, note, folder / "findings.xlsx")
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
