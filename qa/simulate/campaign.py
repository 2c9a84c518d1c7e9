"""A story told week by week: which sessions take place, and what is true in each. No files here."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from datetime import date, datetime, timedelta
from typing import TYPE_CHECKING

import numpy as np

from qa.errors import SiteError
from qa.simulate.story import Ageing, Cast, Drift, Hole, Mishap, Missed, Outline, Software, Step, Story, Trait
from qa.simulate.truth import (
    Bubble,
    Form,
    Inversion,
    PulsePair,
    RunTruth,
    ScannerTruth,
    Surroundings,
    VialTruth,
    vials_of,
)
from qa.site.plate import Plate
from qa.site.recipe import Recipe
from qa.words import Quantity

if TYPE_CHECKING:
    from zoneinfo import ZoneInfo

_YEAR_DAYS = 365.25


@dataclass(frozen=True, slots=True)
class Appointment:
    """A scanner that measures a phantom by a recipe every so many days."""

    scanner: str
    field_t: float
    scanner_facts: Mapping[str, str]
    phantom: str
    phantom_facts: Mapping[str, str]
    plate: Plate
    recipe: Recipe
    every_days: int


@dataclass(frozen=True, slots=True)
class PlannedRun:
    """One session of the campaign, ready to be simulated."""

    appointment: Appointment
    truth: RunTruth
    seed: int
    form: Form
    thermometer_c: float  # what the thermometer showed

    @property
    def name(self) -> str:
        """Folder name: date, scanner, phantom; sorts by date."""
        day = self.truth.acquired.date().isoformat()
        plain = f"{day}-{self.appointment.scanner}-{self.appointment.phantom}".lower()
        return "".join(letter if letter.isalnum() or letter == "-" else "-" for letter in plain)


def seed_for(seed: int, *parts: object) -> int:
    """A seed of 63 bits that depends on all parts, and on nothing else: adding a scanner changes no other."""
    text = "\x1f".join(str(part) for part in (seed, *parts))
    return int.from_bytes(hashlib.sha256(text.encode()).digest()[:8], "big") >> 1


def plan(
    story: Story,
    appointments: tuple[Appointment, ...],
    zone: ZoneInfo,
    *,
    start: date | None = None,
    weeks: int | None = None,
    seed: int | None = None,
) -> Iterator[PlannedRun]:
    """The sessions from `start` for `weeks`, by date.

    Sessions fall on the story's own rhythm, counted from the story's start, so that any part of a story
    is the same as in the whole.
    """
    _check(story, appointments)
    outline = story.story
    first = start or outline.start
    last = first + timedelta(days=7 * (weeks or outline.weeks))
    number = outline.seed if seed is None else seed
    days: list[tuple[date, Appointment]] = []
    for appointment in appointments:
        anchor = _anchor(story, appointment)
        step = -(-(first - anchor).days // appointment.every_days)
        day = anchor + timedelta(days=step * appointment.every_days)
        while day < last:
            if not _missed(story, appointment.scanner, day):
                days.append((day, appointment))
            day += timedelta(days=appointment.every_days)
    for day, appointment in sorted(days, key=lambda pair: (pair[0], pair[1].scanner, pair[1].phantom)):
        yield session(story, appointment, day, zone, number)


def session(story: Story, appointment: Appointment, day: date, zone: ZoneInfo, seed: int) -> PlannedRun:
    """What is true in one session of the story."""
    outline, cast = story.story, story.cast(appointment.scanner)
    own = seed_for(seed, appointment.scanner, appointment.phantom, day.isoformat())
    rng = np.random.default_rng(seed_for(own, "session"))
    celsius = _celsius(outline, day, rng)
    moment = datetime.combine(day, cast.at, zone) + timedelta(minutes=float(np.round(rng.uniform(0, 40))))
    truth = RunTruth(
        scanner=_scanner(story, cast, appointment, day),
        vials=_vials(story, appointment, day, seed),
        acquired=moment,
        celsius=celsius,
        phantom_facts=appointment.phantom_facts,
        shift_mm=(round(float(rng.uniform(-4, 4)), 2), round(float(rng.uniform(-4, 4)), 2)),
        rotation_deg=round(float(np.clip(rng.normal(0, 12), -60, 60)), 2),
        flipped=cast.mirrored,
        matrix=outline.matrix,
        field_of_view_mm=outline.field_of_view_mm,
        t1_factor=_factor(story, appointment.scanner, "T1", day),
        t2_factor=_factor(story, appointment.scanner, "T2", day),
        surroundings=Surroundings(radius_mm=0.46 * outline.field_of_view_mm) if cast.water else None,
    )
    for event in story.event:
        if isinstance(event, Mishap) and event.scanner == appointment.scanner and event.on == day:
            truth = _mishap(truth, event, appointment.recipe)
    thermometer = round(celsius + float(rng.normal(0, outline.thermometer_k)), 1)
    return PlannedRun(appointment, truth, own, cast.form, thermometer)


def _anchor(story: Story, appointment: Appointment) -> date:
    return story.story.start + timedelta(days=story.cast(appointment.scanner).weekday)


def _check(story: Story, appointments: tuple[Appointment, ...]) -> None:
    """Every name in the story is known, and every mishap falls on a session; else SiteError."""
    scanners = {appointment.scanner for appointment in appointments}
    phantoms = {appointment.phantom: appointment.plate for appointment in appointments}
    for index, event in enumerate(story.event, start=1):
        where = f"story.toml, event {index} ({event.kind})"
        if isinstance(event, Ageing | Hole):
            if event.phantom not in phantoms:
                known = ", ".join(sorted(phantoms))
                raise SiteError(f"no schedule has the phantom '{event.phantom}'", where, f"Scheduled are: {known}.")
            if event.vial not in {vial.label for vial in phantoms[event.phantom].vials}:
                raise SiteError(f"the plate has no vial '{event.vial}'", where, "Use a label of the plate.")
            continue
        if event.scanner not in scanners:
            known = ", ".join(sorted(scanners))
            raise SiteError(f"no schedule has the scanner '{event.scanner}'", where, f"Scheduled are: {known}.")
        own = [appointment for appointment in appointments if appointment.scanner == event.scanner]
        if isinstance(event, Mishap):
            gaps = [(event.on - _anchor(story, a)).days % a.every_days for a in own]
            if all(gaps):
                near = event.on - timedelta(days=min(gaps))
                raise SiteError(f"no session is due on {event.on}", where, f"The one before is on {near}.")
            if event.scan is not None and event.scan not in {scan.name for a in own for scan in a.recipe.scans}:
                raise SiteError(f"the recipe has no scan '{event.scan}'", where, "Use a scan's name from the recipe.")


def _missed(story: Story, scanner: str, day: date) -> bool:
    return any(
        isinstance(event, Missed) and event.scanner == scanner and event.on <= day <= (event.until or event.on)
        for event in story.event
    )


def _celsius(outline: Outline, day: date, rng: np.random.Generator) -> float:
    season = outline.season_k * np.cos(2 * np.pi * (day.timetuple().tm_yday - 200) / _YEAR_DAYS)
    return round(float(outline.celsius + season + rng.normal(0, outline.spread_k)), 2)


def _factor(story: Story, scanner: str, trait: Trait, day: date) -> float:
    factor = 1.0
    for event in story.event:
        if isinstance(event, Step) and (event.scanner, event.of) == (scanner, trait) and day >= event.on:
            factor *= 1 + event.percent / 100
        elif isinstance(event, Drift) and (event.scanner, event.of) == (scanner, trait) and day >= event.since:
            years = (min(day, event.until or day) - event.since).days / _YEAR_DAYS
            factor *= 1 + event.percent_per_year / 100 * years
    return factor


def _scanner(story: Story, cast: Cast, appointment: Appointment, day: date) -> ScannerTruth:
    name = appointment.scanner
    versions = [e for e in story.event if isinstance(e, Software) and e.scanner == name and e.on <= day]
    software = max(versions, key=lambda e: e.on).version if versions else cast.software
    return ScannerTruth(
        name=name,
        field_t=appointment.field_t,
        facts=appointment.scanner_facts,
        maker=cast.maker,
        model=cast.model,
        software=software,
        coil=cast.coil,
        refocusing_deg=cast.refocusing_deg,
        pulses=PulsePair(cast.excitation, cast.refocusing, cast.lobes, cast.refocusing_width),
        inversion=Inversion(cast.inversion_efficiency, cast.adiabatic),
        transmit_level=cast.transmit_level * _factor(story, name, "transmit", day),
        snr=cast.snr * _factor(story, name, "snr", day),
        gradient_scale=cast.gradient_scale * _factor(story, name, "gradient", day),
        filtering=cast.filtering,
        scaling=cast.scaling,
    )


def _vials(story: Story, appointment: Appointment, day: date, seed: int) -> tuple[VialTruth, ...]:
    """The vials as made: off the certificate by chance, within its uncertainty; then aged, then bubbled."""
    vials = []
    for vial in vials_of(appointment.plate, appointment.field_t):
        value = {Quantity.T1: vial.t1_ms, Quantity.T2: vial.t2_ms}
        for quantity in value:
            reference = appointment.plate.reference(vial.label, quantity, appointment.field_t)
            if reference is not None:
                made = np.random.default_rng(seed_for(seed, appointment.phantom, vial.label, quantity)).normal()
                value[quantity] += float(np.clip(made, -2, 2)) * reference.u_ms
        bubbles: list[Bubble] = []
        for event in story.event:
            if not isinstance(event, Ageing | Hole) or (event.phantom, event.vial) != (appointment.phantom, vial.label):
                continue
            if isinstance(event, Hole) and event.on <= day <= (event.until or day):
                bubbles.append(Bubble(event.dx_mm, event.dy_mm, event.radius_mm))
            elif isinstance(event, Ageing) and day >= event.since:
                years = (day - event.since).days / _YEAR_DAYS
                value[event.of] *= 1 + event.percent_per_year / 100 * years
        vials.append(replace(vial, t1_ms=value[Quantity.T1], t2_ms=value[Quantity.T2], bubbles=tuple(bubbles)))
    return tuple(vials)


def _mishap(truth: RunTruth, event: Mishap, recipe: Recipe) -> RunTruth:
    scans = [scan for scan in recipe.scans if event.scan in (None, scan.name)]
    note = f"set up wrongly: {event.fault}"
    if event.fault == "no-phantom":
        return replace(truth, empty=True, note=note)
    if event.fault == "wrong-coil":
        worse = replace(truth.scanner, coil=event.coil, snr=truth.scanner.snr / 4)
        return replace(truth, scanner=worse, note=note)
    if event.fault == "wrong-tr":
        changed = {scan.name: (scan.tr_ms or 5000.0) * (1 + event.percent / 100) for scan in scans}
        return replace(truth, tr_ms=changed, note=note)
    if event.fault == "missing-time":
        return replace(truth, skipped={scan.name: (scan.ti_ms or scan.te_ms)[2:4] for scan in scans[:1]}, note=note)
    return replace(truth, omitted=tuple(scan.name for scan in scans[:1]), note=note)
