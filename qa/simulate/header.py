"""What classic and enhanced files have in common: identity, geometry, pixels, file meta."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from pydicom.datadict import dictionary_has_tag, tag_for_keyword
from pydicom.dataset import Dataset, FileDataset, FileMetaDataset
from pydicom.uid import UID, ExplicitVRLittleEndian

from qa.errors import SiteError
from qa.simulate.scene import Part
from qa.simulate.truth import RunTruth
from qa.simulate.wording import accepted
from qa.site.recipe import Scan
from qa.words import Floats

COUNTS = 4000.0  # stored counts of a signal of 1
_IMPLEMENTATION = "2.25.319047203154061523187409131728403371092"


def uid(*parts: object) -> UID:
    """A UID that is the same for the same parts (DICOM PS3.5 B.2: 2.25 and a number of 128 bits)."""
    digest = hashlib.sha256("\x1f".join(str(part) for part in parts).encode()).digest()
    return UID(f"2.25.{int.from_bytes(digest[:16], 'big')}")


@dataclass(frozen=True, slots=True, eq=False)
class ScanData:
    """One scan on its way into files."""

    scan: Scan
    number: int  # of the scan in the recipe, from 1
    frames: Floats  # (frames, rows, columns); 1 is a full signal
    ti_ms: tuple[float | None, ...]  # per frame
    te_ms: tuple[float, ...]
    tr_ms: float
    identity: tuple[object, ...]  # what makes these files' UIDs their own
    part: Part = "magnitude"


def step_of(frame: Floats, truth: RunTruth) -> float:
    """The rescale slope of a frame; per frame, each is stretched to its own maximum, as some scanners do."""
    if truth.scanner.scaling == "counts":
        return 1.0
    return float(f"{max(float(np.abs(frame).max()) * COUNTS / 30000.0, 1e-6):.8g}")


def put_private_slope(ds: Dataset, truth: RunTruth, step: float) -> None:
    """Write the intensity scale as one vendor does: true = stored / private slope, whatever RescaleSlope says.

    References
    ----------
    .. [1] Chenevert et al. (2014), Transl. Oncol. 7, 65-71.
    """
    block = ds.private_block(0x2005, truth.scanner.private_creator, create=True)
    block.add_new(0x0D, "FL", 0.0)
    block.add_new(0x0E, "FL", 1.0 / step)


def leave_out(ds: Dataset, truth: RunTruth) -> None:
    """Drop the attributes that the truth says are lacking, wherever they are in the file."""
    for keyword in truth.left_out:
        if keyword in ds:
            delattr(ds, keyword)
        for element in ds:
            if element.VR == "SQ":
                for item in element.value:
                    leave_out(item, truth)


def stored(frame: Floats, truth: RunTruth, step: float = 1.0) -> Floats:
    """Pixels as stored: 16 bit, signed for real data; `step` is the value of one count times COUNTS."""
    counts = np.rint(frame * COUNTS / step)
    if truth.signed:
        return np.asarray(np.clip(counts, -32768, 32767).astype("<i2"))
    return np.asarray(np.clip(counts, 0, 65535).astype("<u2"))


def describe(data: ScanData, tail: str) -> dict[str, str]:
    """The texts by which the recipe knows the scan."""
    texts = {keyword: accepted(pattern, tail) for keyword, pattern in data.scan.match.items()}
    return {"SeriesDescription": f"{data.scan.name} {tail}".strip(), **texts}


def put(dataset: Dataset, facts: Mapping[str, str]) -> None:
    """Write texts by DICOM keyword.

    Raises
    ------
    SiteError
        If a keyword is not in the DICOM dictionary.
    """
    for keyword, value in facts.items():
        tag = tag_for_keyword(keyword)
        if tag is None or not dictionary_has_tag(tag):
            raise SiteError(f"'{keyword}' is not a DICOM keyword", remedy="See DICOM PS3.6 for the keywords.")
        setattr(dataset, keyword, value.split("\\") if "\\" in value else value)


def start(path: Path, sop_class: UID, instance: UID, truth: RunTruth, study: UID) -> FileDataset:
    """A dataset with everything about the study, the phantom as patient, and the scanner."""
    meta = FileMetaDataset()
    meta.MediaStorageSOPClassUID = sop_class
    meta.MediaStorageSOPInstanceUID = instance
    meta.TransferSyntaxUID = ExplicitVRLittleEndian
    meta.ImplementationClassUID = UID(_IMPLEMENTATION)
    meta.ImplementationVersionName = "VIALBOOK_SIM"
    ds = FileDataset(str(path), {}, file_meta=meta, preamble=b"\0" * 128)
    scanner = truth.scanner
    ds.SpecificCharacterSet = "ISO_IR 192"
    ds.SOPClassUID, ds.SOPInstanceUID = sop_class, instance
    ds.StudyDate = ds.SeriesDate = ds.ContentDate = truth.acquired.strftime("%Y%m%d")
    ds.StudyTime = ds.SeriesTime = ds.ContentTime = truth.acquired.strftime("%H%M%S")
    ds.TimezoneOffsetFromUTC = truth.acquired.strftime("%z")
    ds.AccessionNumber = ""
    ds.Modality = "MR"
    ds.Manufacturer = scanner.maker
    ds.ManufacturerModelName = scanner.model
    ds.SoftwareVersions = scanner.software
    ds.DeviceSerialNumber = "0"
    ds.ReferringPhysicianName = ""
    ds.StudyDescription = "PHANTOM QA"
    ds.PatientName, ds.PatientID = "Phantom^QA", "PHANTOM"
    ds.PatientBirthDate = ds.PatientSex = ""
    ds.StudyInstanceUID = study
    ds.StudyID = truth.acquired.strftime("%y%m%d%H%M")
    ds.FrameOfReferenceUID = uid(study, "frame of reference")
    ds.PositionReferenceIndicator = ""
    ds.PatientPosition = "HFS"
    ds.MagneticFieldStrength = scanner.field_t
    put(ds, scanner.facts)
    put(ds, truth.phantom_facts)
    return ds


def pixels(ds: Dataset, shape: tuple[int, ...], truth: RunTruth, data: bytes) -> None:
    """The image pixel module; `shape` is (rows, columns)."""
    ds.SamplesPerPixel = 1
    ds.PhotometricInterpretation = "MONOCHROME2"
    ds.Rows, ds.Columns = shape
    ds.BitsAllocated = ds.BitsStored = 16
    ds.HighBit = 15
    ds.PixelRepresentation = int(truth.signed)
    ds.PixelData = data


def corner(truth: RunTruth) -> list[float]:
    """ImagePositionPatient of an axial slice at the isocentre, mm."""
    spacing = truth.field_of_view_mm / truth.matrix
    edge = round(-(truth.matrix - 1) / 2 * spacing, 4)
    return [edge, edge, 0.0]


def save(ds: FileDataset, path: Path) -> Path:
    """Write the file; its folder is made."""
    path.parent.mkdir(parents=True, exist_ok=True)
    ds.save_as(path, enforce_file_format=True)
    return path
