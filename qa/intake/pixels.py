"""Pixels on one scale: decoded, checked for size before anything is allocated, and brought to linear units.

Three scales are known. Modality rescale: ``stored * slope + intercept`` (PS3.3 C.7.6.16.2.9, C.11.1). Real World Value
Mapping, of stored values (PS3.3 C.7.6.16.2.11), where there is no rescale. And one vendor's private scale slope:
``(stored * slope + intercept) / (slope * scale slope)`` is what may be compared between images (Chenevert et al.,
Transl Oncol 7 (2014) 65-71, doi 10.1593/tlo.13811).
"""

from __future__ import annotations

import struct
import zlib
from math import isnan

import numpy as np
from pydicom.dataset import Dataset
from pydicom.errors import InvalidDicomError
from pydicom.uid import UID

from qa.intake.header import HeaderProblem
from qa.intake.values import grouped, groups_of, number, text
from qa.words import Pixels

LARGEST_FRAME = 4096 * 4096  # pixels
LARGEST_FILE = 512 * 1024 * 1024  # decoded pixels of one file
_PRIVATE_GROUP = 0x2005
_PRIVATE_CREATOR = "MR IMAGING DD 001"  # how the name of the block's owner ends, in capitals
_SCALE_SLOPE = 0x0E

# What pydicom and its decoders raise on bytes that are not what they claim to be, found by fuzzing: they promise no
# single type. Everything inside the file boundary that reads a foreign byte is guarded by this list.
FOREIGN_BYTES = (
    ArithmeticError,
    AttributeError,
    AssertionError,
    BufferError,
    EOFError,
    InvalidDicomError,
    LookupError,
    MemoryError,
    NotImplementedError,
    OSError,
    RecursionError,
    RuntimeError,
    TypeError,
    ValueError,
    struct.error,
    zlib.error,
)


def check_size(dataset: Dataset, rows: int, columns: int, frames: int) -> None:
    """Compare what the header claims with the bytes that are there, before anything is allocated.

    Raises
    ------
    HeaderProblem
        "no-pixels", "too-large" or "truncated".
    """
    if "PixelData" not in dataset:
        raise HeaderProblem("no-pixels")
    allocated = number(dataset.get("BitsAllocated"))
    if allocated not in (8, 16, 32):
        raise HeaderProblem("damaged", f"{text(dataset.get('BitsAllocated'))!r} bits allocated per pixel")
    pixels = rows * columns * frames
    if rows * columns > LARGEST_FRAME or pixels > LARGEST_FILE:
        raise HeaderProblem("too-large", f"{frames} frames of {rows} x {columns}")
    syntax = UID(text(dataset.file_meta.get("TransferSyntaxUID"))) if hasattr(dataset, "file_meta") else UID("")
    if syntax.is_valid and not syntax.is_private and syntax.is_transfer_syntax and syntax.is_compressed:
        return
    needed = pixels * int(allocated) // 8
    found = len(dataset.PixelData)
    if found < needed:
        raise HeaderProblem("truncated", f"{found} bytes of pixel data where {needed} are needed")


def decode(dataset: Dataset, frames: int) -> np.ndarray:
    """Stored values as (frames, rows, columns). Raises HeaderProblem "undecodable"."""
    try:
        stored = dataset.pixel_array
    except FOREIGN_BYTES as error:
        detail = str(error).splitlines()[0][:200] if str(error) else type(error).__name__
        raise HeaderProblem("undecodable", detail) from error
    if stored.ndim == 2:
        stored = stored[np.newaxis]
    if stored.ndim != 3 or len(stored) != frames:
        raise HeaderProblem("undecodable", f"the decoded pixels have the shape {stored.shape}")
    return np.asarray(stored)


def scale_of(dataset: Dataset, frame: int) -> tuple[str, float, float]:
    """How one frame's stored values become comparable ones: kind, slope and intercept.

    Returns
    -------
    kind : "stored", "rescale", "real-world" or "private"
    slope, intercept : ``comparable = stored * slope + intercept``
    """
    groups = groups_of(dataset, frame)
    slope = _either(grouped(groups, "PixelValueTransformationSequence", "RescaleSlope"), dataset.get("RescaleSlope"))
    intercept = _either(
        grouped(groups, "PixelValueTransformationSequence", "RescaleIntercept"), dataset.get("RescaleIntercept")
    )
    private = _scale_slope([*groups, dataset])
    if isnan(slope) or slope == 0:
        mapped = _real_world([*groups, dataset])
        if mapped is not None:
            return ("real-world", *mapped)
        slope = 1.0
        if isnan(private):
            return "stored", 1.0, 0.0
    offset = 0.0 if isnan(intercept) else intercept
    if not isnan(private) and private != 0:
        return "private", 1.0 / private, offset / (slope * private)
    return "rescale", slope, offset


def scaled(stored: np.ndarray, slope: float, intercept: float) -> Pixels:
    """One frame as float32 in comparable units."""
    return np.asarray(stored, dtype=np.float32) * np.float32(slope) + np.float32(intercept)


def _either(first: object, second: object) -> float:
    found = number(first)
    return number(second) if isnan(found) else found


def _real_world(places: list[Dataset]) -> tuple[float, float] | None:
    for place in places:
        items = place.get("RealWorldValueMappingSequence")
        if items:
            slope, intercept = (number(items[0].get(f"RealWorldValue{k}")) for k in ("Slope", "Intercept"))
            if not isnan(slope) and slope != 0:
                return slope, 0.0 if isnan(intercept) else intercept
    return None


def _scale_slope(places: list[Dataset]) -> float:
    """The private scale slope, found through its private creator (PS3.5 7.8.1), at the top level or in the groups."""
    for place in places:
        for holder in [place, *_items(place)]:
            if not any(tag.group == _PRIVATE_GROUP for tag in holder.keys()):  # noqa: SIM118  # a Dataset iterates elements
                continue
            for creator in holder.private_creators(_PRIVATE_GROUP):
                block = holder.private_block(_PRIVATE_GROUP, creator)
                if creator.upper().endswith(_PRIVATE_CREATOR) and _SCALE_SLOPE in block:
                    return number(block[_SCALE_SLOPE].value)
    return float("nan")


def _items(place: Dataset) -> list[Dataset]:
    """Items of a frame's private sequences, one level down: where enhanced files keep such elements."""
    if "PixelData" in place:
        return []
    return [item for element in place if element.VR == "SQ" and element.tag.is_private for item in element.value]
