"""A story: how simulated scanners are built and what happens to them. Written by hand as ``story.toml``."""

from __future__ import annotations

import tomllib
from datetime import date, time
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, ValidationError

from qa.errors import SiteError
from qa.simulate.truth import Form, Scaling, Shape
from qa.site.plate import Finite, Positive, SiteModel
from qa.words import Quantity

Trait = Literal["T1", "T2", "transmit", "gradient", "snr"]
Fault = Literal["wrong-tr", "missing-time", "wrong-coil", "no-phantom", "scan-omitted"]


class Cast(SiteModel):
    """One scanner of the site as the simulator builds it; what is left out is ordinary."""

    name: str
    maker: str = "Invented Magnetics"
    model: str = "Model 0"
    software: str = "1.0"
    coil: str = "HEAD"
    form: Form = "classic"
    scaling: Scaling = "counts"
    weekday: Annotated[int, Field(ge=0, le=6)] = 0  # days after the story's start
    at: time = time(7, 30)
    snr: Positive = 150.0
    refocusing_deg: Positive = 180.0
    excitation: Shape = "hamming-sinc"
    refocusing: Shape = "hamming-sinc"
    lobes: Positive = 4.0
    refocusing_width: Positive = 1.4
    inversion_efficiency: Annotated[float, Field(gt=0, le=1)] = 0.97
    adiabatic: bool = True
    transmit_level: Positive = 1.0
    gradient_scale: Positive = 1.0
    filtering: Annotated[float, Field(ge=0, lt=1)] = 0.0
    mirrored: bool = False  # the plate is always laid labelled face down
    water: bool = False  # the plate lies in a trough of water instead of air


class Drift(SiteModel):
    """A slow change of one scanner. On T1 or T2 it is apparent, of all vials alike, its mechanism left abstract."""

    kind: Literal["drift"]
    scanner: str
    of: Trait
    percent_per_year: Finite
    since: date
    until: date | None = None


class Step(SiteModel):
    """A sudden change of one scanner."""

    kind: Literal["step"]
    scanner: str
    of: Trait
    percent: Finite
    on: date


class Ageing(SiteModel):
    """A slow change of what is in one vial."""

    kind: Literal["ageing"]
    phantom: str
    vial: str
    of: Quantity
    percent_per_year: Finite
    since: date


class Hole(SiteModel):
    """A bubble that appears in a vial."""

    kind: Literal["bubble"]
    phantom: str
    vial: str
    on: date
    until: date | None = None
    radius_mm: Positive = 2.5
    dx_mm: Finite = 2.0
    dy_mm: Finite = 3.0


class Software(SiteModel):
    """A new software version; what it changes besides its name is told by a step."""

    kind: Literal["software"]
    scanner: str
    version: str
    on: date


class Missed(SiteModel):
    """Sessions that did not take place."""

    kind: Literal["missed"]
    scanner: str
    on: date
    until: date | None = None


class Mishap(SiteModel):
    """A session set up wrongly."""

    kind: Literal["mishap"]
    scanner: str
    on: date
    fault: Fault
    scan: str | None = None  # for wrong-tr, missing-time, scan-omitted; else all scans, or the first
    percent: Finite = -50.0  # change of TR for wrong-tr
    coil: str = "BODY"  # for wrong-coil


Event = Annotated[Drift | Step | Ageing | Hole | Software | Missed | Mishap, Field(discriminator="kind")]


class Outline(SiteModel):
    """What holds for the whole story."""

    start: date
    weeks: Annotated[int, Field(ge=1, le=2600)] = 52
    seed: int = 1
    matrix: Annotated[int, Field(ge=32, le=512)] = 96
    field_of_view_mm: Positive = 192.0
    celsius: Finite = 20.6
    season_k: Finite = 0.6  # half the difference between summer and winter
    spread_k: Annotated[float, Field(ge=0)] = 0.4
    thermometer_k: Annotated[float, Field(ge=0)] = 0.1


class Story(SiteModel):
    """The outline, the cast and the events."""

    story: Outline
    scanner: tuple[Cast, ...] = ()
    event: tuple[Event, ...] = ()

    def cast(self, name: str) -> Cast:
        """The scanner of that name; an ordinary one if the story does not build it."""
        for one in self.scanner:
            if one.name == name:
                return one
        return Cast(name=name)


def read_story(path: Path) -> Story:
    """Read and check a story.

    Raises
    ------
    SiteError
        If the file is not TOML, or says what no story can say; names the place in the file.
    """
    try:
        with path.open("rb") as stream:
            return Story.model_validate(tomllib.load(stream))
    except OSError as error:
        raise SiteError(f"the story cannot be read: {error.strerror}", str(path)) from error
    except tomllib.TOMLDecodeError as error:
        raise SiteError(f"not TOML: {error}", str(path), "Correct the line named.") from error
    except ValidationError as error:
        lines = [f"{'.'.join(str(part) for part in e['loc'])}: {e['msg']}" for e in error.errors()[:5]]
        raise SiteError("; ".join(lines), str(path), "See sample_site/story.toml for what a story can say.") from error
