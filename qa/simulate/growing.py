"""A site folder and its story in, folders of simulated runs out."""

from __future__ import annotations

import csv
import json
from collections.abc import Callable
from datetime import date
from pathlib import Path
from typing import Any

from qa.errors import SiteError, VialbookError
from qa.simulate.campaign import Appointment, PlannedRun, plan, session
from qa.simulate.run import simulate_run
from qa.simulate.story import Outline, Story, read_story
from qa.site.recipe import Recipe

Progress = Callable[[int, int], None]  # done, of how many


def grow(
    site_folder: Path,
    *,
    weeks: int | None = None,
    start: date | None = None,
    seed: int | None = None,
    out: Path,
    progress: Progress | None = None,
) -> list[Path]:
    """Write the weekly runs of every schedule of a site.

    ``<out>/runs/<date>-<scanner>-<phantom>/`` get DICOM files, ``<out>/truth/`` what is true in them, and
    ``<out>/temperatures.csv`` what the thermometers showed. What happens is told by ``story.toml`` in the site
    folder; without one, ordinary scanners on which nothing happens. `weeks`, `start` and `seed` stand before
    the story's own. The same arguments give the same bytes; runs already there with the same truth are kept.

    Parameters
    ----------
    progress : called with (runs done, runs in all) after each run

    Returns
    -------
    list of Path
        The runs' folders, by date.

    Raises
    ------
    SiteError
        If the site or its story cannot be used, or the site has no schedule.
    VialbookError
        If `out` cannot be written, or holds other runs under the same names.
    """
    site, story = _site_and_story(site_folder, start)
    appointments = _appointments(site)
    if not appointments:
        what = "the site has no schedule, so the simulator does not know what to measure"
        raise SiteError(
            what, str(Path(site_folder) / "site.toml"), "Add a [[schedule]] with scanner, phantom and recipe."
        )
    runs = list(plan(story, appointments, site.timezone, start=start, weeks=weeks, seed=seed))
    folders = []
    for done, run in enumerate(runs, start=1):
        folders.append(_write(run, out))
        if progress is not None:
            progress(done, len(runs))
    _write_temperatures(runs, out / "temperatures.csv")
    return folders


def simulate_one(
    site_folder: Path,
    scanner: str,
    *,
    on: date,
    out: Path,
    seed: int | None = None,
    phantom: str | None = None,
    recipe: Recipe | None = None,
) -> Path:
    """Write one run of one scanner of a site, as the site's story has it on that day; gives the run's folder.

    `recipe` stands in for the schedule's own. Errors are those of `grow`.
    """
    site, story = _site_and_story(site_folder, on)
    for appointment in _appointments(site):
        if appointment.scanner == scanner and phantom in (None, appointment.phantom):
            if recipe is not None:
                appointment = _with_recipe(appointment, recipe)
            run = session(story, appointment, on, site.timezone, story.story.seed if seed is None else seed)
            return _write(run, out)
    known = ", ".join(sorted({a.scanner for a in _appointments(site)})) or "none"
    what = f"no schedule has scanner '{scanner}'" + (f" and phantom '{phantom}'" if phantom else "")
    raise SiteError(what, str(Path(site_folder) / "site.toml"), f"Scheduled scanners: {known}.")


def _with_recipe(appointment: Appointment, recipe: Recipe) -> Appointment:
    from dataclasses import replace

    return replace(appointment, recipe=recipe)


def _site_and_story(site_folder: Path, start: date | None) -> tuple[Any, Story]:
    from qa.site import load_site

    folder = Path(site_folder)
    site = load_site(folder)
    path = folder / "story.toml"
    if path.is_file():
        return site, read_story(path)
    return site, Story(story=Outline(start=start or date(2026, 1, 5)))


def _appointments(site: Any) -> tuple[Appointment, ...]:
    out = []
    for entry in site.schedules:
        scanner, phantom = site.scanner(entry.scanner), site.phantom(entry.phantom)
        out.append(
            Appointment(
                scanner=scanner.name,
                field_t=scanner.field_t,
                scanner_facts=dict(scanner.match),
                phantom=phantom.name,
                phantom_facts=dict(phantom.match),
                plate=phantom.plate,
                recipe=entry.recipe,
                every_days=entry.every_days,
            )
        )
    return tuple(out)


def _write(run: PlannedRun, out: Path) -> Path:
    folder, beside = out / "runs" / run.name, out / "truth" / f"{run.name}.json"
    if beside.is_file():
        if _same(run, beside):
            return folder
        what = "another run of that name is there already"
        raise VialbookError(what, str(folder), "Choose another output folder, or remove the old runs.")
    record = simulate_run(
        run.appointment.plate, run.appointment.recipe, run.truth, folder, seed=run.seed, form=run.form
    )
    try:
        beside.parent.mkdir(parents=True, exist_ok=True)
        beside.write_text(json.dumps(record.as_json(), indent=1) + "\n", encoding="utf-8")  # last: the run is complete
    except OSError as error:
        raise VialbookError(f"cannot write what is true of a run: {error}", str(beside)) from error
    return folder


def _same(run: PlannedRun, beside: Path) -> bool:
    try:
        old = json.loads(beside.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return False
    return bool(old.get("seed") == run.seed and old.get("truth") == json.loads(json.dumps(run.truth.as_json())))


def _write_temperatures(runs: list[PlannedRun], path: Path) -> None:
    try:
        with path.open("w", newline="", encoding="utf-8") as stream:
            writer = csv.writer(stream, lineterminator="\n")
            writer.writerow(["scanner", "date", "celsius"])
            for run in runs:
                writer.writerow([run.truth.scanner.name, run.truth.acquired.date().isoformat(), run.thermometer_c])
    except OSError as error:
        raise VialbookError(f"cannot write the temperatures: {error}", str(path)) from error
