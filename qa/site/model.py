"""A site as one frozen object: scanners, phantoms with plates, schedules with recipes, limits, temperatures."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from pathlib import Path
from typing import Annotated, TypeVar
from zoneinfo import ZoneInfo

from pydantic import Field

from qa.site.limits import LimitBlock
from qa.site.plate import Plate, Positive, SiteModel
from qa.site.recipe import Recipe
from qa.site.temperatures import TemperatureTable

Match = Annotated[dict[str, str | int | float], Field(min_length=1)]


class Scanner(SiteModel):
    """One MR scanner, as people call it, and the DICOM values by which its files are known."""

    name: str = Field(min_length=1)
    field_t: Positive
    match: Match


class Phantom(SiteModel):
    """One physical phantom: a serial, a plate, and the DICOM values by which its files are known."""

    name: str = Field(min_length=1)
    serial: str = ""
    plate: Plate
    match: Match


class Schedule(SiteModel):
    """What is to be scanned where, by which recipe, how often."""

    scanner: str
    phantom: str
    recipe: Recipe
    every_days: Annotated[int, Field(ge=1)] = 7
    grace_days: Annotated[int, Field(ge=0)] = 2


class Site(SiteModel):
    """A whole site folder, read and checked."""

    model_config = SiteModel.model_config | {"arbitrary_types_allowed": True}

    folder: Path
    name: str
    timezone: ZoneInfo
    database_url: str
    scanners: tuple[Scanner, ...]
    phantoms: tuple[Phantom, ...]
    schedules: tuple[Schedule, ...]
    limits: tuple[LimitBlock, ...]
    temperatures: TemperatureTable
    plausible_c: tuple[float, float]
    baseline_runs: int

    def scanner(self, name: str) -> Scanner:
        """The scanner of that name; KeyError if there is none."""
        return _named(self.scanners, name)

    def phantom(self, name: str) -> Phantom:
        """The phantom of that name; KeyError if there is none."""
        return _named(self.phantoms, name)

    def schedule_for(self, scanner: str, phantom: str) -> Schedule | None:
        """The first line of the schedule for that scanner and phantom."""
        return next((s for s in self.schedules if (s.scanner, s.phantom) == (scanner, phantom)), None)

    def shortest_days(self, scanner: str) -> int:
        """Days between runs of that scanner, by the densest line of its schedule; 7 where it has none."""
        return min((s.every_days for s in self.schedules if s.scanner == scanner), default=7)

    def celsius(self, scanner: str, when: datetime) -> float | None:
        """What temperatures.csv says for that scanner on that day, degrees Celsius."""
        return self.temperatures.celsius(scanner, when, self.timezone)

    def identify(self, facts: Mapping[str, str]) -> tuple[str | None, str | None]:
        """Names of the scanner and the phantom whose `match` agrees with these header facts; None where none does."""
        scanner = next((s.name for s in self.scanners if agrees(s.match, facts)), None)
        phantom = next((p.name for p in self.phantoms if agrees(p.match, facts)), None)
        return scanner, phantom

    @property
    def archive(self) -> Path:
        """Where the original files are kept."""
        return self.folder / "archive"

    @property
    def pages(self) -> Path:
        """Where reports are written unless asked otherwise."""
        return self.folder / "pages"


def agrees(match: Mapping[str, str | int | float], facts: Mapping[str, str]) -> bool:
    """Whether every keyword of `match` has its value among the facts; numbers are compared as numbers."""
    return all(_equal(wanted, facts.get(keyword)) for keyword, wanted in match.items())


def _equal(wanted: str | int | float, found: str | None) -> bool:
    if found is None:
        return False
    if str(wanted).strip() == found.strip():
        return True
    if isinstance(wanted, str):
        return False
    try:
        return abs(float(found) - wanted) <= 1e-6 * max(1.0, abs(wanted))
    except ValueError:
        return False


_T = TypeVar("_T", Scanner, Phantom)


def _named(items: tuple[_T, ...], name: str) -> _T:
    for item in items:
        if item.name == name:
            return item
    raise KeyError(name)
