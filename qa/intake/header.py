"""What a file's header says: who made it and when, and each frame's times, place and kind.

Attributes and units: DICOM PS3.3 C.8.3.1 (MR Image Module), C.8.13.5 (Enhanced MR functional groups) and
C.7.6.2.1.1 (image plane); times are milliseconds, lengths millimetres.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta, timezone, tzinfo
from math import isnan

from pydicom.dataset import Dataset

from qa.intake.series import Component
from qa.intake.values import NAN, anywhere, grouped, groups_of, number, numbers, text

MR_CLASSES = {
    "1.2.840.10008.5.1.4.1.1.4": "MR Image Storage",
    "1.2.840.10008.5.1.4.1.1.4.1": "Enhanced MR Image Storage",
    "1.2.840.10008.5.1.4.1.1.4.4": "Legacy Converted Enhanced MR Image Storage",
}
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


class HeaderProblem(Exception):  # noqa: N818  # never leaves this room: it carries a hold code to the file boundary
    """A header that cannot be used."""

    def __init__(self, code: str, detail: str = "") -> None:
        super().__init__(code, detail)
        self.code, self.detail = code, detail


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
    frames: tuple[FrameHeader, ...]


def read_header(dataset: Dataset, path: str, sha256: str, size: int, wanted: Iterable[str], zone: tzinfo) -> FileHeader:
    """Take the header of an MR image apart.

    Raises
    ------
    HeaderProblem
        With a code of `qa.intake.holds.CODES`.
    """
    sop_class = text(dataset.get("SOPClassUID"))
    modality = text(dataset.get("Modality"))
    if sop_class not in MR_CLASSES or modality not in ("MR", ""):
        raise HeaderProblem(
            "not-mr-image", f"modality '{modality or 'not stated'}', SOP class {sop_class or 'not stated'}"
        )
    uids = [text(dataset.get(k)) for k in ("SOPInstanceUID", "StudyInstanceUID", "SeriesInstanceUID")]
    if not all(uids):
        raise HeaderProblem("no-identity")
    if number(dataset.get("SamplesPerPixel", 1)) != 1:
        raise HeaderProblem("not-grey", f"{text(dataset.get('SamplesPerPixel'))} samples per pixel")
    rows, columns = number(dataset.get("Rows")), number(dataset.get("Columns"))
    if isnan(rows) or isnan(columns) or rows < 1 or columns < 1:
        raise HeaderProblem("no-pixels", "no matrix size")
    count = number(dataset.get("NumberOfFrames", 1))
    if isnan(count) or not 1 <= count <= 100_000:
        raise HeaderProblem("damaged", f"{text(dataset.get('NumberOfFrames'))!r} frames")
    enhanced = "SharedFunctionalGroupsSequence" in dataset or "PerFrameFunctionalGroupsSequence" in dataset
    if not enhanced and count != 1:
        raise HeaderProblem("damaged", "several frames without functional groups")
    acquired = acquired_at(dataset, zone)
    if acquired is None:
        raise HeaderProblem("no-date")
    frames = tuple(_enhanced_frame(dataset, i) for i in range(int(count))) if enhanced else (_classic_frame(dataset),)
    return FileHeader(
        path=path,
        sha256=sha256,
        size=size,
        sop_instance_uid=uids[0],
        study_uid=uids[1],
        series_uid=uids[2],
        acquired=acquired,
        rows=int(rows),
        columns=int(columns),
        facts={k: v for k in KEPT_FACTS if (v := anywhere(dataset, k))},
        wanted={k: anywhere(dataset, k) for k in wanted},
        personal=names_a_person(dataset),
        frames=frames,
    )


def _classic_frame(dataset: Dataset) -> FrameHeader:
    kinds = [text(item).upper() for item in _listed(dataset.get("ImageType"))]
    return _frame(
        index=0,
        component=_component(text(dataset.get("ComplexImageComponent")), kinds),
        times=(dataset.get("InversionTime"), dataset.get("EchoTime"), dataset.get("RepetitionTime")),
        flip=dataset.get("FlipAngle"),
        geometry=(
            dataset.get("ImagePositionPatient"),
            dataset.get("ImageOrientationPatient"),
            dataset.get("PixelSpacing"),
            dataset.get("SliceThickness"),
        ),
    )


def _enhanced_frame(dataset: Dataset, index: int) -> FrameHeader:
    groups = groups_of(dataset, index)
    kind_items = grouped(groups, "MRImageFrameTypeSequence", "FrameType") or dataset.get("ImageType")
    component = grouped(groups, "MRImageFrameTypeSequence", "ComplexImageComponent") or dataset.get(
        "ComplexImageComponent"
    )
    te = grouped(groups, "MREchoSequence", "EffectiveEchoTime")
    ti = grouped(groups, "MRModifierSequence", "InversionTimes")
    timing = "MRTimingAndRelatedParametersSequence"
    return _frame(
        index=index,
        component=_component(text(component), [text(item).upper() for item in _listed(kind_items)]),
        times=(
            ti if ti is not None else dataset.get("InversionTime"),
            te if te is not None else dataset.get("EchoTime"),
            _first(grouped(groups, timing, "RepetitionTime"), dataset.get("RepetitionTime")),
        ),
        flip=_first(grouped(groups, timing, "FlipAngle"), dataset.get("FlipAngle")),
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
        directions=numbers(directions, 6) or (1.0, 0.0, 0.0, 0.0, 1.0, 0.0),
        spacing_mm=size,
        slice_mm=number(thickness),
    )


def _time(value: object) -> float:
    found = number(value)
    return found if found >= 0 else NAN  # NaN compares false, too


def _first(*values: object) -> object:
    return next((value for value in values if value is not None), None)


def _listed(value: object) -> list[object]:
    if value is None:
        return []
    return [value] if isinstance(value, str) else list(value)  # type: ignore[call-overload]  # pydicom's MultiValue


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
    own = _offset(text(dataset.get("TimezoneOffsetFromUTC"))) or zone
    exact = _moment(text(dataset.get("AcquisitionDateTime")))
    if exact is None:
        for name in ("Acquisition", "Series", "Study", "Content"):
            exact = _moment(text(dataset.get(f"{name}Date")) + text(dataset.get(f"{name}Time")))
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


_PERSONAL = (
    "PatientBirthDate",
    "PatientAddress",
    "PatientTelephoneNumbers",
    "OtherPatientNames",
    "PatientMotherBirthName",
    "PatientComments",
    "OtherPatientIDs",
)


def names_a_person(dataset: Dataset) -> bool:
    """Whether elements that belong to a person are filled: a name that is not the phantom's own id, a birth date…"""
    name = text(dataset.get("PatientName")).replace("^", " ").strip()
    own = {text(dataset.get(k)).strip().lower() for k in ("PatientID", "DeviceSerialNumber", "StudyID")}
    named = bool(name) and name.lower() not in own and not any(w in name.lower() for w in ("phantom", "qa", "test"))
    return named or any(text(dataset.get(keyword)) for keyword in _PERSONAL)
