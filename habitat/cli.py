"""The command line: doors only. Imports happen inside the commands, so that --help is instant."""

import errno
import os
import signal
import sys
from pathlib import Path
from typing import Annotated

import typer

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    help="From measured physiology and ocean files to the depths where an animal can breathe.",
    epilog="Viable water is where the measured animal could breathe; it is not a statement that the animal is there.",
)

_CHOICE = "Name of the variable or column that holds it, when a file has several."


@app.command(epilog="Example: habitat study examples/basin.toml --out results")
def study(
    study_file: Annotated[
        Path, typer.Argument(metavar="STUDY.toml", help="The question: ocean, species, scenarios, regions.")
    ],
    out: Annotated[
        Path | None, typer.Option(help="Folder for the results, instead of the one the study names.")
    ] = None,
) -> None:
    """Run a study: tables, pictures, methods, record."""
    from habitat.study import run_study

    folder = run_study(study_file, out)
    print(f"results in {folder}: start with findings.md and methods.md", file=sys.stderr)


@app.command(
    epilog="Examples: habitat bands cast.csv --species prawn.toml --activity 1,2.5   "
    "habitat bands grid.nc --species prawn.toml --out bands.nc --uncertainty"
)
def bands(
    ocean: Annotated[list[Path], typer.Argument(metavar="OCEAN", help="Casts (CSV, WHP-Exchange) or a netCDF grid.")],
    species: Annotated[Path, typer.Option(metavar="S.toml", help="Species file.")],
    activity: Annotated[str, typer.Option(help="Activity factors, separated by commas.")] = "1",
    out: Annotated[
        Path | None, typer.Option(help="FILE.csv for a table; FILE.nc for a grid. Without it: standard output.")
    ] = None,
    uncertainty: Annotated[
        bool, typer.Option("--uncertainty", help="Add quantile edges and mean thickness to FILE.nc.")
    ] = False,
    chance: Annotated[
        bool, typer.Option("--chance", help="Add the chance of viability of every cell to FILE.nc.")
    ] = False,
    hydrostatic: Annotated[bool, typer.Option(help="Include the hydrostatic term in PO2.")] = True,
    temperature: Annotated[str | None, typer.Option(metavar="NAME", help=_CHOICE)] = None,
    salinity: Annotated[str | None, typer.Option(metavar="NAME", help=_CHOICE)] = None,
    oxygen: Annotated[str | None, typer.Option(metavar="NAME", help=_CHOICE)] = None,
) -> None:
    """Find the viable bands of casts or of a grid."""
    from habitat.bandfile import write_bands

    choose = _chosen(temperature=temperature, salinity=salinity, oxygen=oxygen)
    factors = _activities(activity)
    write_bands(
        ocean, species, factors, out, choose=choose, hydrostatic=hydrostatic, uncertainty=uncertainty, chance=chance
    )


@app.command(
    epilog="Examples: habitat trials rates.csv --species-name 'Veil prawn' --out prawn.toml --table trials.csv   "
    "habitat trials traces.csv --chambers chambers.csv --species-name 'Veil prawn' --out prawn.toml --pictures pictures"
)
def trials(
    trial_file: Annotated[Path, typer.Argument(metavar="TRIALS.csv", help="Table of rates, or raw oxygen traces.")],
    species_name: Annotated[str, typer.Option(metavar="NAME", help="Name of the animal.")],
    out: Annotated[Path, typer.Option(metavar="S.toml", help="Species file to write.")],
    table: Annotated[Path | None, typer.Option(metavar="T.csv", help="Table to write, one row a trial.")] = None,
    pictures: Annotated[Path | None, typer.Option(metavar="DIR", help="Folder for pictures, new or empty.")] = None,
    chambers: Annotated[Path | None, typer.Option(metavar="C.csv", help="Chambers, if the trials are traces.")] = None,
    window: Annotated[
        str | None, typer.Option(metavar="SIZE", help="Of traces: '10 min' (the default), or of oxygen, '0.5 kPa'.")
    ] = None,
    settling: Annotated[float, typer.Option(metavar="HOURS", help="Left out at the start of each trial.")] = 0.0,
    background_left: Annotated[
        float, typer.Option(metavar="SHARE", help="Background still in the rates at a trial's end: its sd, of rest.")
    ] = 0.0075,
    supply: Annotated[str, typer.Option(help="joint, largest, three-largest or two-point.")] = "joint",
    resting_rate: Annotated[
        str, typer.Option(help="joint, rule, lowest-normal, lowest-ten, lowest-ten-per-cent or quantile-0.1 to -0.3.")
    ] = "joint",
    reference_temperature: Annotated[
        float | None, typer.Option(metavar="DEGC", help="For the species file; the mean of the trials without it.")
    ] = None,
    supply_energy: Annotated[
        str | None, typer.Option(metavar="EV,SD", help="If the trials have one temperature only.")
    ] = None,
    resting_energy: Annotated[
        str | None, typer.Option(metavar="EV,SD", help="If the trials have one temperature only.")
    ] = None,
) -> None:
    """Estimate a species file from respirometry trials.

    Trials with live animals need the approval of an ethics committee.
    """
    from habitat.trialsjob import read_trials, write_trials

    energies = {"supply_energy": supply_energy, "resting_energy": resting_energy}
    write_trials(
        read_trials(trial_file, chambers, window=window, settling_hours=settling),
        species_name=species_name,
        out=out,
        table=table,
        pictures=pictures,
        sources=[path for path in (trial_file, chambers) if path is not None],
        supply=supply,
        resting=resting_rate,
        background_sd=background_left,
        reference_temperature=reference_temperature,
        energies={name: _energy(text, name) for name, text in energies.items() if text is not None} or None,
    )


@app.command(epilog="Example: habitat inspect cruise_hy1.csv")
def inspect(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="An ocean file of any kind.")],
    temperature: Annotated[str | None, typer.Option(metavar="NAME", help=_CHOICE)] = None,
    salinity: Annotated[str | None, typer.Option(metavar="NAME", help=_CHOICE)] = None,
    oxygen: Annotated[str | None, typer.Option(metavar="NAME", help=_CHOICE)] = None,
) -> None:
    """Say what a file holds and what is wrong with it."""
    from habitat.ocean import inspect as inspection

    print(inspection(file, choose=_chosen(temperature=temperature, salinity=salinity, oxygen=oxygen)))


def _chosen(**names: str | None) -> dict[str, str]:
    return {role: name for role, name in names.items() if name is not None}


def _activities(text: str) -> list[float]:
    try:
        factors = [float(part) for part in text.split(",")]
    except ValueError:
        factors = []
    if not factors or not all(0 < factor < float("inf") for factor in factors) or len(set(factors)) < len(factors):
        message = f"'{text}': expected different numbers above 0, separated by commas, for example 1,2.5"
        raise typer.BadParameter(message, param_hint="--activity")
    return factors


def _energy(text: str, name: str) -> tuple[float, float]:
    """Value and standard deviation of an activation energy [eV]."""
    try:
        value, deviation = (float(part) for part in text.split(","))
    except ValueError:
        value, deviation = float("nan"), float("nan")
    if not (abs(value) < float("inf") and 0 <= deviation < float("inf")):
        message = f"'{text}': expected a value and its standard deviation, for example 0.3,0.05"
        raise typer.BadParameter(message, param_hint=f"--{name.replace('_', '-')}")
    return value, deviation


def _show_version(wanted: bool) -> None:
    if wanted:
        from importlib.metadata import version

        print(f"habitat {version('habitat')}")
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[
        bool, typer.Option("--version", is_eager=True, callback=_show_version, help="Show the version.")
    ] = False,
) -> None:
    pass


def _stop(number: int, _frame: object) -> None:
    """Leave in the ordinary way, so that unfinished output is removed."""
    print("habitat: stopped before the end", file=sys.stderr)
    sys.exit(128 + number)


def main() -> None:
    """Run the command line; an error the user can cause is one message and exit status 1."""
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, _stop)
    sys.stdout.reconfigure(line_buffering=True)  # so that a full disk is met below, and not after the end
    try:
        app()
    except Exception as error:
        from habitat.errors import HabitatError, OutputError

        if isinstance(error, OSError) and error.errno == errno.ENOSPC:  # only standard output is written unguarded
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())  # else Python tries again at its end
            error = OutputError("the disk is full", where="standard output", remedy="free some space")
        if not isinstance(error, HabitatError):
            raise error
        print(f"habitat: {error}", file=sys.stderr)
        sys.exit(1)
