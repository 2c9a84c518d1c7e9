"""Reading a site folder: every file checked, every complaint of a file said at once, with its line."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Annotated, Any, TypeVar
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from pydantic import Field, model_validator

from qa.errors import SiteError
from qa.site.limits import LimitBlock
from qa.site.model import Match, Phantom, Scanner, Schedule, Site
from qa.site.plate import Plate, Reference, SiteModel, Vial
from qa.site.recipe import Recipe, Scan
from qa.site.tables import TomlFile, nearest
from qa.site.temperatures import read_temperatures

DATABASE_VARIABLE = "VIALBOOK_DATABASE"
_M = TypeVar("_M", Plate, Recipe)


class _SiteTable(SiteModel):
    name: str = Field(min_length=1)
    timezone: str = "UTC"
    database: str = "sqlite:///book.sqlite"
    plausible_c: tuple[float, float] = (18.0, 24.0)
    baseline_runs: Annotated[int, Field(ge=3)] = 8

    @model_validator(mode="after")
    def _range(self) -> _SiteTable:
        if self.plausible_c[0] >= self.plausible_c[1]:
            raise ValueError("plausible_c is [lowest, highest] in degrees Celsius")
        return self


class _PhantomTable(SiteModel):
    name: str = Field(min_length=1)
    serial: str = ""
    plate: str
    match: Match


class _ScheduleTable(SiteModel):
    scanner: str
    phantom: str
    recipe: str
    every_days: Annotated[int, Field(ge=1)] = 7
    grace_days: Annotated[int, Field(ge=0)] = 2


class _Named(SiteModel):
    name: str = Field(min_length=1)


def load_site(folder: Path) -> Site:
    """Read site.toml and all that it names.

    Raises
    ------
    SiteError
        Naming the file, the line and, for a misspelt key, the nearest known one.
    """
    folder = Path(folder).resolve()
    if not (folder / "site.toml").is_file():
        raise SiteError(
            "there is no site.toml in this folder",
            str(folder),
            "Name the site folder with --site DIR or $VIALBOOK_SITE, or make one with 'vialbook new DIR'.",
        )
    file = TomlFile.read(folder / "site.toml")
    file.known_tables("site", "scanner", "phantom", "schedule")
    head = file.one("site", _SiteTable)
    scanners = file.many("scanner", Scanner)
    phantom_tables = file.many("phantom", _PhantomTable)
    schedule_tables = file.many("schedule", _ScheduleTable)
    zone = _zone(file, head.timezone if head else "UTC")
    _unique(file, "scanner", [s.name for s in scanners])
    _unique(file, "phantom", [p.name for p in phantom_tables])
    names = {"scanner": [s.name for s in scanners], "phantom": [p.name for p in phantom_tables]}
    if not file.complaints:
        for index, line in enumerate(schedule_tables):
            for kind, wanted in (("scanner", line.scanner), ("phantom", line.phantom)):
                if wanted not in names[kind]:
                    file.complain(
                        f"there is no {kind} '{wanted}'{nearest(wanted, names[kind])}", "schedule", index, kind
                    )
    plate_paths = [_inside(file, folder, "phantom", i, "plate", p.plate) for i, p in enumerate(phantom_tables)]
    recipe_paths = [_inside(file, folder, "schedule", i, "recipe", s.recipe) for i, s in enumerate(schedule_tables)]
    file.check()
    assert head is not None
    plates = {path: load_plate(path) for path in dict.fromkeys(plate_paths)}
    recipes = {path: load_recipe(path) for path in dict.fromkeys(recipe_paths)}
    return Site(
        folder=folder,
        name=head.name,
        timezone=zone,
        database_url=database_url(folder, os.environ.get(DATABASE_VARIABLE) or head.database),
        scanners=tuple(scanners),
        phantoms=tuple(
            Phantom(name=p.name, serial=p.serial, plate=plates[path], match=p.match)
            for p, path in zip(phantom_tables, plate_paths, strict=True)
        ),
        schedules=tuple(
            Schedule(**(s.model_dump() | {"recipe": recipes[path]}))
            for s, path in zip(schedule_tables, recipe_paths, strict=True)
        ),
        limits=load_limits(folder / "limits.toml", names["scanner"]),
        temperatures=read_temperatures(folder / "temperatures.csv", names["scanner"], zone),
        plausible_c=head.plausible_c,
        baseline_runs=head.baseline_runs,
    )


def load_plate(path: Path) -> Plate:
    """A plate file: [plate], [[vial]], [[reference]]. Raises SiteError."""
    file = TomlFile.read(path, "site.toml names it as a phantom's plate.")
    file.known_tables("plate", "vial", "reference")
    head = file.one("plate", _Named)
    vials, references = file.many("vial", Vial), file.many("reference", Reference)
    file.check()
    whole = {"name": head.name if head else "", "vials": vials, "references": references}
    return _assembled(file, "plate", whole, Plate)


def load_recipe(path: Path) -> Recipe:
    """A recipe file: [recipe], [[scan]]. Raises SiteError."""
    file = TomlFile.read(path, "site.toml names it as a schedule's recipe.")
    file.known_tables("recipe", "scan")
    head = file.one("recipe", _Named)
    scans = file.many("scan", Scan)
    file.check()
    return _assembled(file, "recipe", {"name": head.name if head else "", "scans": scans}, Recipe)


def load_limits(path: Path, scanners: list[str]) -> tuple[LimitBlock, ...]:
    """limits.toml: [[limits]]; absent means no limits. Raises SiteError."""
    if not path.exists():
        return ()
    file = TomlFile.read(path)
    file.known_tables("limits")
    blocks = file.many("limits", LimitBlock)
    if not file.complaints:
        for index, block in enumerate(blocks):
            if block.scanner is not None and block.scanner not in scanners:
                what = f"site.toml has no scanner '{block.scanner}'{nearest(block.scanner, scanners)}"
                file.complain(what, "limits", index, "scanner")
    file.check()
    return tuple(blocks)


def database_url(folder: Path, url: str) -> str:
    """The URL with a relative SQLite path made absolute, relative to the site folder."""
    prefix = "sqlite:///"
    if url.startswith(prefix) and not url.startswith("sqlite:////") and ":memory:" not in url:
        return prefix + str(folder / url.removeprefix(prefix))
    return url


def _assembled(file: TomlFile, table: str, values: dict[str, Any], model: type[_M]) -> _M:
    made = file.validated(table, 0, values, model, {})
    file.check()
    assert made is not None
    return made


def _zone(file: TomlFile, name: str) -> ZoneInfo:
    try:
        return ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        file.complain(f'\'{name}\' is not a time zone; write it like "Europe/Lisbon" or "UTC"', "site", 0, "timezone")
        return ZoneInfo("UTC")


def _unique(file: TomlFile, table: str, names: list[str]) -> None:
    for index, name in enumerate(names):
        if name in names[:index]:
            file.complain(f"two [[{table}]] tables have the name '{name}'", table, index, "name")


def _inside(file: TomlFile, folder: Path, table: str, index: int, key: str, relative: str) -> Path:
    """A path that the user wrote relative to the site folder; one that leaves the folder is complained about."""
    if "\0" in relative:
        file.complain(f"{relative!r} is no path", table, index, key)
        return folder
    path = (folder / relative).resolve()
    if not path.is_relative_to(folder):
        file.complain(f"'{relative}' lies outside the site folder", table, index, key)
    return path
