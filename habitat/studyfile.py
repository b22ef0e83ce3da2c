"""The study file: one question, checked before any work begins."""

import glob
import math
import os
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from pydantic import Field, field_validator, model_validator

from habitat.errors import InputError
from habitat.files import nearest, read_toml
from habitat.ocean.roles import ROLES
from habitat.regions import EVERYWHERE, Region, box, read_polygons
from habitat.scenario import KEEP_RULES, Change, FieldFile, Percent, Scenario
from habitat.schema import Table, validate
from habitat.species import Species, read_species

BASELINE = "baseline"

LARGEST_WARMING = 40.0
"""A warming, or cooling, of more than this is a mistake [degC]."""


@dataclass(frozen=True)
class Animal:
    """A species of a study, and how active it must be able to be.

    Attributes
    ----------
    species : Species
    file : Path
    activities : tuple of float
        Activity factors [1].
    """

    species: Species
    file: Path
    activities: tuple[float, ...]


@dataclass(frozen=True)
class Study:
    """A study file, read and checked; paths are relative to the working directory or absolute.

    Attributes
    ----------
    title : str
    file : Path
    ocean_files : tuple of str
        May hold glob patterns.
    choose : dict
        Part of a water column to the variable that plays it, where a file has several.
    keep_flags : dict
        Quality flags to keep, see `habitat.ocean.open_ocean`; empty for the defaults.
    hydrostatic : bool
        Whether PO2 includes the hydrostatic term.
    animals : tuple of Animal
    scenarios : tuple of Scenario
        Without the baseline.
    regions : tuple of Region
    folder : Path
        For the results.
    figures : bool
        Whether to draw pictures.
    draws : int
        Draws of the physiology for the uncertainty of regional values.
    """

    title: str
    file: Path
    ocean_files: tuple[str, ...]
    choose: dict[str, str]
    keep_flags: dict[str, list[int]]
    hydrostatic: bool
    animals: tuple[Animal, ...]
    scenarios: tuple[Scenario, ...]
    regions: tuple[Region, ...]
    folder: Path
    figures: bool
    draws: int


class _Flags(Table):
    ctd: list[int] | None = None
    water: list[int] | None = None
    bottle: list[int] | None = None


class _Ocean(Table):
    files: list[str] = Field(min_length=1)
    temperature: str | None = None
    salinity: str | None = None
    oxygen: str | None = None
    depth: str | None = None
    pressure: str | None = None
    latitude: str | None = None
    longitude: str | None = None
    time: str | None = None
    seabed_depth: str | None = None
    keep_flags: _Flags = _Flags()
    hydrostatic: bool = True


class _Animal(Table):
    file: str
    activity: list[float] = Field(default=[1.0], min_length=1)
    body_mass: float | None = Field(default=None, gt=0)

    @field_validator("activity")
    @classmethod
    def _positive(cls, factors: list[float]) -> list[float]:
        wrong = [factor for factor in factors if factor <= 0]
        if wrong or len(set(factors)) < len(factors):
            msg = f"found {factors}; expected different numbers above 0, multiples of the resting rate"
            raise ValueError(msg)
        return factors


class _FieldFile(Table):
    file: str
    variable: str


class _Percent(Table):
    percent: float = Field(ge=-100)


class _Change(Table):
    change: str


class _Scenario(Table):
    name: str = Field(min_length=1)
    warming: Any = 0.0
    oxygen: Any

    @field_validator("warming")
    @classmethod
    def _known_warming(cls, warming: Any) -> Any:
        if isinstance(warming, dict):
            return validate(_FieldFile, warming, "")
        if isinstance(warming, list):
            return _profile(warming)
        if _is_number(warming) and abs(warming) < LARGEST_WARMING:
            return float(warming)
        msg = f"found {warming!r}; expected a number of degC, [[depth, degC], ...], or {{file = ..., variable = ...}}"
        raise ValueError(msg)

    @field_validator("oxygen")
    @classmethod
    def _known_rule(cls, rule: Any) -> Any:
        if isinstance(rule, dict):
            for key, model in (("percent", _Percent), ("change", _Change), ("file", _FieldFile)):
                if key in rule:
                    return validate(model, rule, "")
        if isinstance(rule, str):
            known = {name.lower(): name for name in KEEP_RULES}
            if rule.lower() in known:
                return known[rule.lower()]
            msg = f"found '{rule}'; {nearest(rule, KEEP_RULES)}"
            raise ValueError(msg)
        msg = (
            f"found {rule!r}; expected one of {', '.join(KEEP_RULES)}, or {{percent = -8}}, "
            '{change = "-10 umol/kg"}, {file = "...", variable = "..."}'
        )
        raise ValueError(msg)


class _Region(Table):
    name: str = Field(min_length=1)
    box: list[float] | None = None
    polygon: str | None = None

    @model_validator(mode="after")
    def _one_shape(self) -> "_Region":
        if (self.box is None) == (self.polygon is None):
            msg = f"region '{self.name}' needs either box = [west, east, south, north] or polygon = \"file.geojson\""
            raise ValueError(msg)
        if self.box is not None and len(self.box) != 4:
            msg = f"region '{self.name}': box has {len(self.box)} numbers; expected [west, east, south, north]"
            raise ValueError(msg)
        return self


class _Output(Table):
    folder: str = "out"
    figures: bool = True
    draws: int = Field(default=128, ge=8, le=4096)

    @field_validator("draws")
    @classmethod
    def _power_of_two(cls, draws: int) -> int:
        if draws & (draws - 1):
            msg = f"found {draws}; expected a power of 2, such as 64"
            raise ValueError(msg)
        return draws


class _Study(Table):
    title: str = Field(min_length=1)
    ocean: _Ocean
    species: list[_Animal] = Field(min_length=1)
    scenario: list[_Scenario] = Field(default_factory=list)
    region: list[_Region] = Field(default_factory=list)
    output: _Output = _Output()


def read_study(path: str | Path) -> Study:
    """Read and check a study file with the species and region files that it names.

    Raises
    ------
    InputError
        Anything in these files is missing, unknown or impossible.
    """
    path = Path(path)
    table = validate(_Study, read_toml(path), str(path))
    beside = path.parent
    animals = tuple(_animal(entry, beside) for entry in table.species)
    scenarios = tuple(_scenario(entry, beside, path) for entry in table.scenario)
    regions = tuple(region for entry in table.region for region in _regions(entry, path))
    _all_different([animal.species.name for animal in animals], "species", path)
    _all_different([BASELINE, *(scenario.name for scenario in scenarios)], "scenario", path)
    _all_different([region.name for region in regions], "region", path)
    ocean = table.ocean
    return Study(
        title=table.title,
        file=path,
        ocean_files=tuple(_pattern(beside, name) for name in ocean.files),
        choose={role: name for role in ROLES if (name := getattr(ocean, role, None))},
        keep_flags={key: flags for key, flags in ocean.keep_flags.model_dump().items() if flags is not None},
        hydrostatic=ocean.hydrostatic,
        animals=animals,
        scenarios=scenarios,
        regions=regions or (Region(EVERYWHERE),),
        folder=_resolved(beside, table.output.folder),
        figures=table.output.figures,
        draws=table.output.draws,
    )


def _animal(entry: _Animal, beside: Path) -> Animal:
    file = _resolved(beside, entry.file)
    species = read_species(file)
    if entry.body_mass is not None and entry.body_mass != species.body_mass:
        species = species.at_mass(entry.body_mass)
        species = replace(species, name=f"{species.name}, {entry.body_mass:g} g")  # a study may ask for several masses
    return Animal(species, file, tuple(entry.activity))


def _scenario(entry: _Scenario, beside: Path, path: Path) -> Scenario:
    def resolved(value: Any) -> Any:
        return FieldFile(_resolved(beside, value.file), value.variable) if isinstance(value, _FieldFile) else value

    oxygen = resolved(entry.oxygen)
    if isinstance(oxygen, _Percent):
        oxygen = Percent(oxygen.percent)
    elif isinstance(oxygen, _Change):
        try:
            oxygen = Change.parse(oxygen.change)
        except InputError as error:
            where = f"{path}, scenario '{entry.name}'"
            raise type(error)(error.found, where=where, expected=error.expected, remedy=error.remedy) from None
    return Scenario(entry.name, resolved(entry.warming), oxygen)


def _regions(entry: _Region, path: Path) -> list[Region]:
    if entry.box is not None:
        try:
            return [box(entry.name, *entry.box)]
        except InputError as error:
            raise InputError(error.found, where=f"{path}, {error.where}", expected=error.expected) from None
    return read_polygons(_resolved(path.parent, str(entry.polygon)), entry.name)


def _resolved(beside: Path, name: str) -> Path:
    """Resolve a path of the study file, which is relative to that file, and shorten it for messages and records."""
    return Path(os.path.normpath(beside / name))


def _pattern(beside: Path, name: str) -> str:
    """Resolve a path that may hold a pattern; brackets and stars in the folder of the study are none."""
    return str(_resolved(Path(glob.escape(str(beside))) if glob.has_magic(name) else beside, name))


def _profile(pairs: list[Any]) -> tuple[tuple[float, float], ...]:
    known = all(isinstance(pair, list) and len(pair) == 2 and all(map(_is_number, pair)) for pair in pairs)
    depths, values = zip(*pairs, strict=True) if known and pairs else ((), ())
    increasing = list(depths) == sorted(set(depths)) and min(depths, default=-1) >= 0
    if not increasing or max(map(abs, values)) >= LARGEST_WARMING:
        msg = f"found {pairs}; expected [[depth, degC], ...] with depths in m, from 0 or more, increasing"
        raise ValueError(msg)
    return tuple((float(depth), float(value)) for depth, value in pairs)


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def _all_different(names: list[str], what: str, path: Path) -> None:
    repeated = {name for name in names if names.count(name) > 1}
    if repeated:
        first = sorted(repeated)[0]
        remedy = f"'{BASELINE}' is the ocean as given; choose another name" if first == BASELINE else "rename one"
        raise InputError(f"two entries of {what} are called '{first}'", where=str(path), remedy=remedy)
