"""What leaves the measurement: readings with their uncertainty budget, and the evidence that the run page shows."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from qa.locate.placement import Placement
from qa.words import Quantity, Remark, State


@dataclass(frozen=True, slots=True)
class Budget:
    """Standard uncertainties (k = 1, ms) whose root sum of squares is the combined one (GUM, JCGM 100:2008, 5.1)."""

    noise_ms: float  # thermal noise, from the fit's covariance
    model_ms: float  # what the signal model assumes: timing, inversion, refocusing, T1 in a T2 fit
    region_ms: float  # differences between the voxels of the vial beyond noise
    temperature_ms: float  # of the correction to the reference temperature only; not part of the as-measured value


@dataclass(frozen=True, slots=True)
class Reading:
    """One quantity in one vial from one scan of one run. Numbers are None where the state carries none."""

    vial: str
    quantity: Quantity
    scan: str
    method: str
    method_version: str
    state: State
    notes: tuple[str, ...]
    voxels: int
    excluded_voxels: int
    value_ms: float | None  # as measured, at the run's temperature
    u_ms: float | None  # combined standard uncertainty of value_ms, k = 1
    budget: Budget | None
    value_at_reference_ms: float | None  # corrected to the reference temperature
    u_at_reference_ms: float | None
    reference_ms: float | None
    u_reference_ms: float | None
    deviation_percent: float | None  # of value_at_reference_ms from reference_ms
    u_deviation_percent: float | None  # without the reference's own uncertainty


@dataclass(frozen=True, slots=True)
class Curve:
    """One vial's signal in one scan, for the run page. Lists of equal length, times in ms."""

    vial: str
    scan: str
    times_ms: list[float]
    signal: list[float]
    fitted: list[float]
    residual: list[float]
    noise: float  # standard deviation expected of one point of `signal`


@dataclass(frozen=True, slots=True)
class Circle:
    """Where a vial lies in the picture, in voxels of the image."""

    vial: str
    row: float
    column: float
    radius: float  # of the measured region, voxels (in row direction)
    state: State


@dataclass(frozen=True, slots=True)
class Picture:
    """One grey image of one scan as PNG (8 bit), with the circles of the vials."""

    scan: str
    rows: int
    columns: int
    spacing_mm: tuple[float, float]
    png: bytes
    circles: tuple[Circle, ...]


@dataclass(frozen=True, slots=True)
class Measurement:
    """What one pass of measuring a run gives. With no readings, a void remark says why."""

    readings: tuple[Reading, ...]
    placement: Placement | None
    placement_centre_mm: tuple[float, float, float] | None  # patient coordinates
    celsius: float | None
    u_celsius: float | None
    celsius_source: str  # "option", "log", "temperatures.csv", "none: …"
    remarks: tuple[Remark, ...]
    curves: tuple[Curve, ...] = ()
    pictures: tuple[Picture, ...] = ()
    shared: Mapping[str, float] = field(default_factory=dict)  # run-level traits: "snr", "placement_scale"…
    software: str = ""
    coil: str = ""
