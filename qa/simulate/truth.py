"""What is true in a simulated run: the vials, the scanner, the session. Frozen, plain, written beside the data as JSON.

Placement convention (the one of the whole project, stated here again because this room knows nothing of
the room that finds plates): a plate point (x, y) in mm, y up, seen from the labelled face, lies in the image at ::

    x' = -x if flipped else x
    across = scale * (x' cos(rotation) - y sin(rotation))   # mm to the right of the plate's centre
    up     = scale * (x' sin(rotation) + y cos(rotation))   # mm above it

so a positive rotation is counter-clockwise as seen on the displayed image.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Any, Literal

from qa.site.plate import Plate
from qa.words import Quantity

Shape = Literal["hard", "gaussian", "sinc", "hamming-sinc", "hann-sinc"]
Form = Literal["classic", "enhanced", "one-series"]
Scaling = Literal["counts", "slope-per-frame", "private-slope"]
Written = Literal["magnitude", "real", "real-imaginary"]


@dataclass(frozen=True, slots=True)
class Bubble:
    """A round hole without signal inside a vial; offsets from the vial's centre in the plate's frame, mm."""

    dx_mm: float
    dy_mm: float
    radius_mm: float


@dataclass(frozen=True, slots=True)
class VialTruth:
    """What is in one vial. Relaxation times hold at `at_c`; they follow the temperature linearly."""

    label: str
    t1_ms: float
    t2_ms: float
    at_c: float = 20.0
    t1_per_k_percent: float = 0.0
    t2_per_k_percent: float = 0.0
    density: float = 1.0  # relative proton density
    bubbles: tuple[Bubble, ...] = ()
    absent: bool = False  # the vial was taken out: its place is filled as the surroundings are

    def at(self, celsius: float) -> tuple[float, float]:
        """T1 and T2 in ms at `celsius`."""
        warm = (celsius - self.at_c) / 100.0
        return self.t1_ms * (1 + self.t1_per_k_percent * warm), self.t2_ms * (1 + self.t2_per_k_percent * warm)


@dataclass(frozen=True, slots=True)
class Surroundings:
    """The fill between the vials: a round trough of liquid, with the vials' walls cut out of it."""

    t1_ms: float = 2700.0
    t2_ms: float = 1500.0
    density: float = 1.0
    radius_mm: float = 90.0
    wall_mm: float = 1.0


@dataclass(frozen=True, slots=True)
class PulsePair:
    """Shapes of the slice-selective pulses of a spin echo."""

    excitation: Shape = "hamming-sinc"
    refocusing: Shape = "hamming-sinc"
    lobes: float = 4.0  # time-bandwidth product of the pulses
    refocusing_width: float = 1.4  # refocusing slice over excited slice


@dataclass(frozen=True, slots=True)
class Inversion:
    """How well the inversion pulse inverts."""

    efficiency: float = 0.97  # 1: Mz becomes -Mz
    adiabatic: bool = True  # False: the angle is 180 degrees times the local transmit field
    loss_ms: float = 0.5  # transverse time of the pulse: efficiency falls by exp(-loss/T2)


@dataclass(frozen=True, slots=True)
class ScannerTruth:
    """A scanner: its physics, and what it writes about itself."""

    name: str
    field_t: float
    facts: Mapping[str, str] = field(default_factory=dict)  # DICOM keyword = value, as the site's `match` asks
    maker: str = "Invented Magnetics"
    model: str = "Model 0"
    software: str = "1.0"
    coil: str = "HEAD"
    refocusing_deg: float = 180.0  # nominal angle of the refocusing pulses, all but the first alike
    pulses: PulsePair = PulsePair()
    inversion: Inversion = Inversion()
    transmit_level: float = 1.0  # true over nominal flip angle at the centre
    transmit_bow: float = -0.05  # relative change of the flip angle 100 mm off centre
    transmit_tilt: tuple[float, float] = (0.02, -0.01)  # relative change per 100 mm, across and up
    receive_bow: float = -0.2
    receive_tilt: tuple[float, float] = (0.10, -0.06)
    snr: float = 150.0  # fully relaxed vial at TE = 0 over the noise of one channel
    gradient_scale: float = 1.0  # size in the image over true size
    filtering: float = 0.0  # 0: none; 0.46: Hamming window over k-space
    scaling: Scaling = "counts"
    private_creator: str = ""  # for private-slope: owner of the group 2005 block in which the slope is written


@dataclass(frozen=True, slots=True)
class RunTruth:
    """One session: the scanner and the phantom as they were that day, and how the run was set up."""

    scanner: ScannerTruth
    vials: tuple[VialTruth, ...]
    acquired: datetime  # aware
    celsius: float = 20.0
    phantom_facts: Mapping[str, str] = field(default_factory=dict)  # DICOM keyword = value
    shift_mm: tuple[float, float] = (0.0, 0.0)  # of the plate's centre from the image's: across, up
    rotation_deg: float = 0.0
    flipped: bool = False
    matrix: int = 96
    field_of_view_mm: float = 192.0
    slice_mm: float = 5.0
    inversion_te_ms: float = 12.0  # echo time of the inversion-recovery readout
    t1_factor: float = 1.0  # scanner-wide apparent change; the mechanism is left abstract
    t2_factor: float = 1.0
    surroundings: Surroundings | None = None  # None: air
    empty: bool = False  # the phantom was forgotten
    tr_ms: Mapping[str, float] = field(default_factory=dict)  # scan name = TR really used, where not the recipe's
    skipped: Mapping[str, tuple[float, ...]] = field(default_factory=dict)  # scan name = TIs or TEs not acquired
    omitted: tuple[str, ...] = ()  # names of scans not done at all
    written: Written = "magnitude"  # real: after phase correction; real-imaginary: both parts, uncorrected phase
    sampled: int | None = None  # k-space lines really sampled, the rest filled with zeros; None: as many as matrix
    left_out: tuple[str, ...] = ()  # DICOM keywords that this scanner's files lack
    note: str = ""

    def vial(self, label: str) -> VialTruth:
        """The truth of one vial (KeyError if there is none)."""
        for vial in self.vials:
            if vial.label == label:
                return vial
        raise KeyError(label)

    @property
    def signed(self) -> bool:
        """Whether pixels can be negative."""
        return self.written != "magnitude"

    def as_json(self) -> dict[str, Any]:
        """Plain types only."""
        plain = dataclasses.asdict(self)
        plain["acquired"] = self.acquired.isoformat()
        return plain


@dataclass(frozen=True, slots=True)
class VialRecord:
    """What a perfect measurement of this run would give for one vial."""

    label: str
    t1_ms: float  # at the run's temperature, with the scanner's apparent factor
    t2_ms: float
    row: float  # fractional voxels
    column: float
    absent: bool
    flip_factor: float  # true over nominal flip angle at the vial


@dataclass(frozen=True, slots=True)
class RunRecord:
    """The truth of a run as written, to compare results with."""

    folder: Path
    files: tuple[Path, ...]
    study_uid: str
    seed: int
    form: Form
    truth: RunTruth
    spacing_mm: float
    centre_row: float
    centre_column: float
    noise: float  # standard deviation of one channel in stored units times slope
    vials: tuple[VialRecord, ...]

    def as_json(self) -> dict[str, Any]:
        """Plain types only; paths relative to the run's folder."""
        plain = dataclasses.asdict(self)
        plain["truth"] = self.truth.as_json()
        plain["folder"] = self.folder.name
        plain["files"] = [path.relative_to(self.folder).as_posix() for path in self.files]
        return plain


def vials_of(plate: Plate, field_t: float) -> tuple[VialTruth, ...]:
    """The vials of a plate, true to their reference values at `field_t`.

    Where a reference is absent, T1 is 1000 ms, and T2 a tenth of T1.
    """
    vials = []
    for vial in plate.vials:
        long = plate.reference(vial.label, Quantity.T1, field_t)
        short = plate.reference(vial.label, Quantity.T2, field_t)
        t1_ms = long.value_ms if long else 1000.0
        vials.append(
            VialTruth(
                label=vial.label,
                t1_ms=t1_ms,
                t2_ms=short.value_ms if short else 0.1 * t1_ms,
                at_c=(long or short).at_c if (long or short) else 20.0,  # type: ignore[union-attr]
                t1_per_k_percent=long.per_k_percent if long else 0.0,
                t2_per_k_percent=short.per_k_percent if short else 0.0,
            )
        )
    return tuple(vials)
