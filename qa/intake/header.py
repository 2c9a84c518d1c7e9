"""What a file's header says: who made it and when, and each frame's times, place and kind.

Attributes and units: DICOM PS3.3 C.8.3.1 (MR Image Module), C.8.13.5 (Enhanced MR functional groups) and
C.7.6.2.1.1 (image plane); times are milliseconds, lengths millimetres.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta, timezone, tzinfo
from math import hypot

from pydicom.dataset import Dataset

from qa.intake.claims import LOSSY, HeaderProblem, check_kind, check_size, is_enhanced, matrix_of, syntax_of
from qa.intake.persons import personal_keywords
from qa.intake.series import Component
from qa.intake.values import NAN, anywhere, grouped, groups_of, listed, number, numbers, places_of, text, value_of

# Facts about equipment and protocol that may be kept; nothing here names a person.
KEPT_FACTS = (
    "Manufacturer",
    "ManufacturerModelName",
    "DeviceSerialNumber",
    "StationName",
    "SoftwareVersions",
    "MagneticFieldStrength",
    "ReceiveCoilName",
    "TransmitCoilName",
    "SeriesDescription",
    "ProtocolName",
    "SequenceName",
    "PulseSequenceName",
    "PixelBandwidth",
)


@dataclass(frozen=True, slots=True)
class FrameHeader:
    """One frame. Times in ms (NaN where not stated), position and spacing in mm, directions as unit vectors."""

    index: int
    component: Component | None  # None: a map computed by the scanner, not a signal
    ti_ms: float
    te_ms: float
    tr_ms: float
    flip_deg: float
    position_mm: tuple[float, ...]
    directions: tuple[float, ...]  # six: along a row, along a column
    spacing_mm: tuple[float, ...]  # between rows, between columns
    slice_mm: float


@dataclass(frozen=True, slots=True, eq=False)
class FileHeader:
    """One file's header, as far as it is needed."""

    path: str
    sha256: str
    size: int
    sop_instance_uid: str
    study_uid: str
    series_uid: str
    acquired: datetime
    rows: int
    columns: int
    facts: Mapping[str, str]  # non-personal
    wanted: Mapping[str, str]  # whatever the site's and the recipes' match tables ask for; not kept beyond intake
    personal: bool  # whether elements that name a person are filled
    lossy: bool  # whether the pixels were ever compressed with loss
    frames: tuple[FrameHeader, ...]


def read_header(dataset: Dataset, path: str, sha256: str, size: int, wanted: Iterable[str], zone: tzinfo) -> FileHeader:
    """Take the header of an MR image apart.

    Raises
    ------
    HeaderProblem
        With a code of `qa.intake.holds.CODES`.
    """
    check_kind(dataset)
    uids = [text(value_of(dataset, k)) for k in ("SOPInstanceUID", "StudyInstanceUID", "SeriesInstanceUID")]
    if not all(uids):
        raise HeaderProblem("no-identity")
    rows, columns, count = matrix_of(dataset)
    check_size(dataset, rows, columns, count)  # before a hundred thousand frames are looked for
    acquired = acquired_at(dataset, zone)
    if acquired is None:
        raise HeaderProblem("no-date")
    places = places_of(dataset)
    if is_enhanced(dataset):
        frames = tuple(_enhanced_frame(dataset, i) for i in range(count))
    else:
        frames = (_classic_frame(dataset),)
    return FileHeader(
        path=path,
        sha256=sha256,
        size=size,
        sop_instance_uid=uids[0],
        study_uid=uids[1],
        series_uid=uids[2],
        acquired=acquired,
        rows=rows,
        columns=columns,
        facts={k: v for k in KEPT_FACTS if (v := anywhere(places, k))},
        wanted={k: anywhere(places, k) for k in wanted},
        personal=bool(personal_keywords(dataset)),
        lossy=text(value_of(dataset, "LossyImageCompression")) == "01" or str(syntax_of(dataset)) in LOSSY,
        frames=frames,
    )


def _classic_frame(dataset: Dataset) -> FrameHeader:
    kinds = [text(item).upper() for item in listed(value_of(dataset, "ImageType"))]
    return _frame(
        index=0,
        component=_component(text(value_of(dataset, "ComplexImageComponent")), kinds),
        times=(value_of(dataset, "InversionTime"), value_of(dataset, "EchoTime"), value_of(dataset, "RepetitionTime")),
        flip=value_of(dataset, "FlipAngle"),
        geometry=(
            value_of(dataset, "ImagePositionPatient"),
            value_of(dataset, "ImageOrientationPatient"),
            value_of(dataset, "PixelSpacing"),
            value_of(dataset, "SliceThickness"),
        ),
    )


def _enhanced_frame(dataset: Dataset, index: int) -> FrameHeader:
    groups = groups_of(dataset, index)
    kind_items = grouped(groups, "MRImageFrameTypeSequence", "FrameType") or value_of(dataset, "ImageType")
    component = grouped(groups, "MRImageFrameTypeSequence", "ComplexImageComponent") or value_of(
        dataset, "ComplexImageComponent"
    )
    te = grouped(groups, "MREchoSequence", "EffectiveEchoTime")
    ti = grouped(groups, "MRModifierSequence", "InversionTimes")
    timing = "MRTimingAndRelatedParametersSequence"
    return _frame(
        index=index,
        component=_component(text(component), [text(item).upper() for item in listed(kind_items)]),
        times=(
            ti if ti is not None else value_of(dataset, "InversionTime"),
            te if te is not None else value_of(dataset, "EchoTime"),
            _first(grouped(groups, timing, "RepetitionTime"), value_of(dataset, "RepetitionTime")),
        ),
        flip=_first(grouped(groups, timing, "FlipAngle"), value_of(dataset, "FlipAngle")),
        geometry=(
            grouped(groups, "PlanePositionSequence", "ImagePositionPatient"),
            grouped(groups, "PlaneOrientationSequence", "ImageOrientationPatient"),
            grouped(groups, "PixelMeasuresSequence", "PixelSpacing"),
            grouped(groups, "PixelMeasuresSequence", "SliceThickness"),
        ),
    )


def _frame(
    index: int,
    component: Component | None,
    times: tuple[object, object, object],
    flip: object,
    geometry: tuple[object, object, object, object],
) -> FrameHeader:
    position, directions, spacing, thickness = geometry
    size = numbers(spacing, 2)
    if size is None or min(size) <= 0:
        raise HeaderProblem("no-geometry", f"PixelSpacing is {text(spacing)!r}")
    ti, te, tr = (_time(value) for value in times)
    return FrameHeader(
        index=index,
        component=component,
        ti_ms=ti,
        te_ms=te,
        tr_ms=tr,
        flip_deg=number(flip),
        position_mm=numbers(position, 3) or (0.0, 0.0, 0.0),
        directions=_directions(directions),
        spacing_mm=size,
        slice_mm=number(thickness),
    )


def _directions(value: object) -> tuple[float, ...]:
    """Two unit vectors at right angles (PS3.3 C.7.6.2.1.1); an axial plane where the file does not give such."""
    found = numbers(value, 6)
    if found is not None:
        along, down = found[:3], found[3:]
        across = sum(a * b for a, b in zip(along, down, strict=True))
        if abs(hypot(*along) - 1) < 0.01 and abs(hypot(*down) - 1) < 0.01 and abs(across) < 0.01:
            return found
    return (1.0, 0.0, 0.0, 0.0, 1.0, 0.0)


def _time(value: object) -> float:
    found = number(value)
    return found if found >= 0 else NAN  # NaN compares false, too


def _first(*values: object) -> object:
    return next((value for value in values if value is not None), None)


# ComplexImageComponent is the standard's word (PS3.3 C.8.13.3.1.2); value 3 and later of ImageType are the vendors'.
_MARKS: dict[str, Component] = {"M": "magnitude", "P": "phase", "R": "real", "I": "imaginary"}
_MAPS = ("T1 MAP", "T2 MAP", "T1_MAP", "T2_MAP", "R1_MAP", "R2_MAP", "B0 MAP", "B1 MAP", "ADC", "FIELD_MAP")


def _component(stated: str, kinds: list[str]) -> Component | None:
    """Magnitude unless the header says otherwise; None for maps."""
    if any(kind in _MAPS for kind in kinds):
        return None
    for word in [stated.upper(), *kinds[2:]]:
        for full in ("MAGNITUDE", "PHASE", "REAL", "IMAGINARY"):
            if word == full or word.startswith(full + " "):
                return _MARKS[full[0]]
        mark = word.split("_")[0]
        if mark in _MARKS and (word == mark or "_" in word):
            return _MARKS[mark]
    return "magnitude"


def acquired_at(dataset: Dataset, zone: tzinfo) -> datetime | None:
    """When the data were acquired, aware: from the most particular date and time that the header has."""
    own = _offset(text(value_of(dataset, "TimezoneOffsetFromUTC"))) or zone
    exact = _moment(text(value_of(dataset, "AcquisitionDateTime")))
    if exact is None:
        for name in ("Acquisition", "Series", "Study", "Content"):
            exact = _moment(text(value_of(dataset, f"{name}Date")) + text(value_of(dataset, f"{name}Time")))
            if exact is not None:
                break
    if exact is None:
        return None
    return exact if exact.tzinfo else exact.replace(tzinfo=own)


def _moment(digits: str) -> datetime | None:
    """A DICOM DT, or DA and TM written one after the other (PS3.5 table 6.2-1); at least the day."""
    offset: tzinfo | None = None
    for sign in "+-":
        at = digits.find(sign, 8)
        if at > 0:
            offset = _offset(digits[at:])
            digits = digits[:at]
    digits = digits.replace(":", "").replace("-", "").split(".")[0]
    for pattern, length in (("%Y%m%d%H%M%S", 14), ("%Y%m%d%H%M", 12), ("%Y%m%d%H", 10), ("%Y%m%d", 8)):
        if len(digits) >= length:
            try:
                return datetime.strptime(digits[:length], pattern).replace(tzinfo=offset)
            except ValueError:
                return None
    return None


def _offset(written: str) -> timezone | None:
    if len(written) != 5 or written[0] not in "+-" or not written[1:].isdigit():
        return None
    minutes = int(written[1:3]) * 60 + int(written[3:5])
    if minutes > 14 * 60:
        return None
    return timezone(timedelta(minutes=-minutes if written[0] == "-" else minutes))
