"""From a table of trials, or raw traces, to a species file, a table and pictures."""

import re
import shutil
import sys
import tempfile
from collections.abc import Sequence
from importlib.metadata import version
from pathlib import Path

import numpy as np

from habitat import figures, tables
from habitat.errors import InputError, OutputError, UnitError
from habitat.files import atomic_path, output_errors, sha256
from habitat.progress import steps
from habitat.species import Species, write_species
from habitat.trials.analysis import Analysis, analyse, provenance, reasons, species_points, trial_table
from habitat.trials.classic import provision_kinks
from habitat.trials.rates import read_rates
from habitat.trials.response import fit_species
from habitat.trials.traces import read_traces
from habitat.trials.trial import Trial
from habitat.trials.windows import Window
from habitat.units import factor

CANDIDATES = 200
"""Corrections at which the envelope of a picture is drawn."""

REACH = 0.5
"""Largest correction of that picture, either way [kPa]."""


def read_trials(trial_file: Path, chambers: Path | None, *, window: str | None, settling_hours: float) -> list[Trial]:
    """Read a table of rates, or with a chamber table raw traces.

    Parameters
    ----------
    trial_file : Path
    chambers : Path or None
    window : str or None
        Of traces only: a size with its unit, of time or of oxygen partial pressure; 10 min by default.
    settling_hours : float
        [h]

    Raises
    ------
    InputError
        A file cannot be used, or a window is given without chambers or with another unit.
    """
    if chambers is not None:
        return read_traces(trial_file, chambers, window=_window(window or "10 min"), settling_hours=settling_hours)
    if window is not None:
        raise InputError(f"--window {window} without --chambers", expected="raw traces with a chamber table")
    return read_rates(trial_file, settling_hours=settling_hours)


def _window(text: str) -> Window:
    match = re.fullmatch(r"\s*([0-9.]+)\s*([A-Za-z]+)\s*", text)
    for kind, unit in (("time", "min"), ("oxygen", "kPa")) if match else ():
        try:
            return Window(kind, float(match[1]) * factor(match[2], unit))
        except (UnitError, ValueError):
            continue
    raise InputError(f"window '{text}'", where="--window", expected="a size such as '10 min' or '0.5 kPa'")


def write_trials(
    trials: Sequence[Trial],
    *,
    species_name: str,
    out: Path,
    table: Path | None,
    pictures: Path | None,
    sources: Sequence[Path],
    supply: str,
    resting: str,
    background_sd: float,
    reference_temperature: float | None,
    energies: dict[str, tuple[float, float]] | None,
) -> None:
    """Analyse trials and write what is asked for; all inputs are judged before anything is written.

    Parameters
    ----------
    trials : sequence of Trial
    species_name : str
    out : Path
        Species file.
    table : Path or None
        CSV, one row a trial.
    pictures : Path or None
        Folder for pictures, new or empty.
    sources : sequence of Path
        Files that the trials came from.
    supply, resting, background_sd
        See `habitat.trials.analysis.analyse`.
    reference_temperature : float or None
        [degC]; None for the mean of the trials.
    energies : dict or None
        Activation energies and their standard deviations [eV], where the trials have one temperature only.

    Raises
    ------
    InputError, OutputError
        A trial cannot be analysed, the trials do not make a species, or an output cannot be written.
    """
    for path in (out, table, pictures):
        if path is not None and not path.absolute().parent.is_dir():
            raise OutputError(
                "the folder does not exist", where=str(path.parent), remedy="create it, or choose another"
            )
    analyses = analyse(trials, supply=supply, resting=resting, background_sd=background_sd)
    said = provenance(analyses, supply=supply, resting=resting)
    said |= {"made_by": f"habitat {version('habitat')}", "files": {str(path): sha256(path) or "" for path in sources}}
    species = fit_species(
        species_points(analyses),
        name=species_name,
        reference_temperature=reference_temperature,
        energies=energies,
        provenance=said,
    )
    if pictures is not None:
        _write_pictures(analyses, species, pictures)
    if table is not None:
        with atomic_path(table) as temporary:
            tables.write_csv(trial_table(analyses), temporary)
    write_species(species, out)
    flagged = ", ".join(f"{flag} {count}" for flag, count in reasons(analyses).items()) or "none"
    sys.stderr.write(f"species in {out}: {len(trials)} trials; flags: {flagged}\n")


def _write_pictures(analyses: Sequence[Analysis], species: Species, folder: Path) -> None:
    """Draw into a folder beside the one asked for, and rename it when all pictures are there."""
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise OutputError("exists and is not an empty folder", where=str(folder), remedy="choose a new folder")
    with output_errors(folder):
        temporary = Path(tempfile.mkdtemp(prefix=f".{folder.name}.", dir=folder.absolute().parent))
    try:
        with output_errors(folder), steps(len(analyses) + 2) as progress:
            for analysis in analyses:
                progress.step(analysis.trial.name)
                picture = figures.trial_picture(
                    analysis.trial, analysis.joint, *_envelope(analysis.trial), title=analysis.trial.name
                )
                figures.save(picture, temporary / f"trial_{_plain(analysis.trial.name)}")
            table = trial_table(analyses)
            progress.step("species")
            figures.save(figures.species_picture(table, species, title=species.name), temporary / "species")
            progress.step("offsets")
            figures.save(figures.offsets_picture(table, title=species.name), temporary / "offsets")
            temporary.chmod(0o755)
            if folder.exists():
                folder.rmdir()
            temporary.rename(folder)
    finally:
        shutil.rmtree(temporary, ignore_errors=True)


def _envelope(trial: Trial) -> tuple[tuple[np.ndarray, np.ndarray], list[tuple[float, float]]]:
    """Largest provision of a trial for each candidate correction, and its kinks."""
    lowest = max(-REACH, -float(trial.po2.min()) + REACH / CANDIDATES)
    candidates = np.linspace(lowest, lowest + 2 * REACH, CANDIDATES)
    provision = (trial.rate / (trial.po2 + candidates[:, None])).max(axis=1)
    kinks = provision_kinks(trial.po2, trial.rate, float(candidates[0]), float(candidates[-1]))
    return (candidates, provision), [(kink.offset, kink.provision) for kink in kinks]


def _plain(name: str) -> str:
    return re.sub(r"[^\w.]+", "-", name, flags=re.ASCII).strip("-.").lower()[:80] or "unnamed"
