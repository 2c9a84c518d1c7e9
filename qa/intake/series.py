"""What leaves the intake room: calibrated series of one run, with their timings, geometry and provenance."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import numpy as np

from qa.site.recipe import Scan
from qa.words import Floats, Pixels, Remark

if TYPE_CHECKING:
    from qa.intake.header import FileHeader
    from qa.intake.reader import DatasetCache


@dataclass(frozen=True, slots=True)
class Held:
    """A file that cannot be used, where it lay, why, and what to do about it."""

    path: str
    code: str  # a key of qa.intake.holds.CODES
    reason: str  # a sentence with what was found, and what to do
    sha256: str | None = None  # None where the file could not be read at all


@dataclass(frozen=True, slots=True)
class FrameSource:
    """Where one frame came from: file content hash and frame number (from 0)."""

    sha256: str
    frame: int


@dataclass(frozen=True, slots=True, eq=False)
class Grid:
    """The image plane: maps (row, column) to patient millimetres (DICOM PS3.3 C.7.6.2.1.1)."""

    shape: tuple[int, int]  # rows, columns
    spacing_mm: tuple[float, float]  # between rows, between columns (DICOM PixelSpacing order)
    origin_mm: Floats  # (3,), centre of the first voxel
    along_row: Floats  # (3,), unit vector in the direction of increasing column
    along_column: Floats  # (3,), unit vector in the direction of increasing row

    def to_patient_mm(self, row: float, column: float) -> Floats:
        """Patient coordinates (3,) in mm of a point in (fractional) voxels; the first voxel's centre is (0, 0)."""
        return np.asarray(
            self.origin_mm
            + self.along_row * (column * self.spacing_mm[1])
            + self.along_column * (row * self.spacing_mm[0])
        )


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """All frames of one scan of the recipe, at one slice position, on one intensity scale, in order of TI, then TE."""

    scan: Scan
    frames: Pixels  # (frames, rows, columns), float32, one linear unit for all frames
    signed: bool  # False: magnitude
    ti_ms: Floats  # (frames,), milliseconds; NaN where the data do not say
    te_ms: Floats  # (frames,), milliseconds (effective echo time where stated)
    tr_ms: Floats  # (frames,), milliseconds; NaN where the data do not say
    flip_deg: Floats  # (frames,), excitation flip angle, degrees; NaN where the data do not say
    grid: Grid
    slice_mm: float  # slice thickness; NaN where the data do not say
    sources: tuple[FrameSource, ...]
    facts: Mapping[str, str]  # non-personal header facts by DICOM keyword
    remarks: tuple[Remark, ...] = ()


@dataclass(frozen=True, slots=True)
class FileRecord:
    """One original file of a run: where it lay, and its content's hash (the name it has in the archive)."""

    path: str
    sha256: str
    size: int
    sop_instance_uid: str


@dataclass(frozen=True, slots=True, eq=False)
class Session:
    """One phantom session on one scanner: the stuff of which a run is made. Pixels are not loaded yet.

    `qa.intake.load(session, recipe)` gives its series.
    """

    run: str  # 12 hex digits of SHA-256 over study UID, scanner and phantom: the same at every intake
    study_uid: str
    scanner: str
    phantom: str
    acquired: datetime  # aware; the earliest acquisition time in the files, in the site's time zone
    field_t: float  # from the data, else from site.toml
    files: tuple[FileRecord, ...]
    facts: Mapping[str, str]
    remarks: tuple[Remark, ...] = ()
    archive: Path | None = None  # where the originals lie, by hash
    headers: tuple[FileHeader, ...] = ()  # in the order of `files`
    cache: DatasetCache | None = None  # files parsed already
    held: tuple[Held, ...] = ()  # files that `merge` refused beside what came in before


Component = Literal["magnitude", "real", "imaginary", "phase"]
