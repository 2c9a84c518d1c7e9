"""Pixels on one scale: decoded, and brought to linear units.

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
from pydicom.errors import BytesLengthException, InvalidDicomError
from pydicom.uid import UID

from qa.intake.claims import HeaderProblem, syntax_of
from qa.intake.values import grouped, groups_of, number, value_of
from qa.words import Pixels

# What decodes the transfer syntaxes that Pillow and pydicom themselves do not (names of packages).
DECODERS = {
    "1.2.840.10008.1.2.4.57": "pylibjpeg pylibjpeg-libjpeg",  # JPEG lossless
    "1.2.840.10008.1.2.4.70": "pylibjpeg pylibjpeg-libjpeg",  # JPEG lossless, first-order prediction
    "1.2.840.10008.1.2.4.80": "pylibjpeg pylibjpeg-libjpeg",  # JPEG-LS
    "1.2.840.10008.1.2.4.81": "pylibjpeg pylibjpeg-libjpeg",
    "1.2.840.10008.1.2.4.201": "pylibjpeg pylibjpeg-openjpeg",  # high-throughput JPEG 2000
    "1.2.840.10008.1.2.4.202": "pylibjpeg pylibjpeg-openjpeg",
    "1.2.840.10008.1.2.4.203": "pylibjpeg pylibjpeg-openjpeg",
}
_NATIVE = ("1.2.840.10008.1.2", "1.2.840.10008.1.2.1", "1.2.840.10008.1.2.1.99")  # uncompressed, little endian
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
    BytesLengthException,
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


def decode(dataset: Dataset, frames: int) -> np.ndarray:
    """Stored values as (frames, rows, columns). Raises HeaderProblem "undecodable"."""
    plain = _plain(dataset, frames)
    if plain is not None:
        return plain
    try:
        stored = dataset.pixel_array
    except FOREIGN_BYTES as error:
        raise HeaderProblem("undecodable", _missing(syntax_of(dataset)) or told(error)) from error
    if stored.ndim == 2:
        stored = stored[np.newaxis]
    if stored.ndim != 3 or len(stored) != frames:
        raise HeaderProblem("undecodable", f"the decoded pixels have the shape {stored.shape}")
    return np.asarray(stored)


def _plain(dataset: Dataset, frames: int) -> np.ndarray | None:
    """Native little-endian pixels as they lie in the file, without a copy; None where they need more than that."""
    if str(syntax_of(dataset)) not in _NATIVE:
        return None
    rows, columns = number(value_of(dataset, "Rows")), number(value_of(dataset, "Columns"))
    bits, used = number(value_of(dataset, "BitsAllocated")), number(value_of(dataset, "BitsStored"))
    kind = {0.0: "u", 1.0: "i"}.get(number(value_of(dataset, "PixelRepresentation")))
    if (
        kind is None
        or bits not in (8, 16, 32)
        or not 1 <= used <= bits
        or number(value_of(dataset, "HighBit")) != used - 1
    ):
        return None
    count = frames * int(rows) * int(columns)
    stored = np.frombuffer(dataset.PixelData, np.dtype(f"<{kind}{int(bits) // 8}"), count)
    if used < bits:  # unused bits may hold an overlay: pydicom takes it out
        low, high = (0, 2**used - 1) if kind == "u" else (-(2 ** (used - 1)), 2 ** (used - 1) - 1)
        if stored.min() < low or stored.max() > high:
            return None
    return stored.reshape(frames, int(rows), int(columns))


def _missing(syntax: UID) -> str:
    """What to install where no decoder for a transfer syntax is there; empty where one is, or none exists."""
    from pydicom.pixels.decoders.base import get_decoder  # only where decoding failed

    try:
        decoder = get_decoder(syntax)
    except NotImplementedError:
        return f"{syntax.name} is a transfer syntax for which there is no decoder"
    if decoder.is_available:
        return ""
    needed = DECODERS.get(str(syntax), "pylibjpeg pylibjpeg-libjpeg pylibjpeg-openjpeg")
    return f"no decoder for {syntax.name} is installed; install one with 'pip install {needed}'"


def told(error: Exception) -> str:
    """The first line of what an error says, short; else its name."""
    lines = str(error).strip().splitlines()
    return lines[0][:200] if lines else type(error).__name__


def scale_of(dataset: Dataset, frame: int) -> tuple[str, float, float]:
    """How one frame's stored values become comparable ones: kind, slope and intercept.

    Returns
    -------
    kind : "stored", "rescale", "real-world" or "private"
    slope, intercept : ``comparable = stored * slope + intercept``
    """
    groups = groups_of(dataset, frame)
    slope = _either(
        grouped(groups, "PixelValueTransformationSequence", "RescaleSlope"), value_of(dataset, "RescaleSlope")
    )
    intercept = _either(
        grouped(groups, "PixelValueTransformationSequence", "RescaleIntercept"), value_of(dataset, "RescaleIntercept")
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
    """One frame as float32 in comparable units. Raises HeaderProblem "damaged" where the scale leaves no number."""
    with np.errstate(over="ignore", invalid="ignore"):
        values: Pixels = np.asarray(stored, dtype=np.float32) * np.float32(slope) + np.float32(intercept)
    if not np.isfinite(values).all():
        raise HeaderProblem("damaged", f"with slope {slope:g} and intercept {intercept:g} pixels are no numbers")
    return values


def _either(first: object, second: object) -> float:
    found = number(first)
    return number(second) if isnan(found) else found


def _real_world(places: list[Dataset]) -> tuple[float, float] | None:
    for place in places:
        items = value_of(place, "RealWorldValueMappingSequence")
        if items:
            slope, intercept = (number(value_of(items[0], f"RealWorldValue{k}")) for k in ("Slope", "Intercept"))
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
    private = [place[tag] for tag in place.keys() if tag.is_private]  # noqa: SIM118  # converts none of the others
    return [item for element in private if element.VR == "SQ" for item in element.value]
