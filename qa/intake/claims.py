"""What a file claims to be, compared with the bytes that are there, before anything is allocated or taken apart."""

from __future__ import annotations

import zlib
from math import isnan

from pydicom.dataset import Dataset
from pydicom.uid import UID

from qa.intake.values import number, text, value_of

MR_CLASSES = {
    "1.2.840.10008.5.1.4.1.1.4": "MR Image Storage",
    "1.2.840.10008.5.1.4.1.1.4.1": "Enhanced MR Image Storage",
    "1.2.840.10008.5.1.4.1.1.4.4": "Legacy Converted Enhanced MR Image Storage",
}
LARGEST_FRAME = 4096 * 4096  # pixels
LARGEST_FILE = 256 * 1024 * 1024  # pixels of one file, all frames
MOST_FRAMES = 100_000
LARGEST_RATIO = 200  # decoded or inflated bytes over those in the file: images with noise in them reach 20
FREE = 16 * 1024 * 1024  # bytes that may be decoded or inflated whatever the ratio
LOSSY = frozenset(
    "1.2.840.10008.1.2.4." + end for end in ("50", "51", "81", "91", "93", "203")
)  # JPEG baseline and extended, near-lossless JPEG-LS, JPEG 2000 not stated to be lossless
_DEFLATED = b"1.2.840.10008.1.2.1.99"


class HeaderProblem(Exception):  # noqa: N818  # never leaves this room: it carries a hold code to the file boundary
    """A header that cannot be used."""

    def __init__(self, code: str, detail: str = "") -> None:
        super().__init__(code, detail)
        self.code, self.detail = code, detail


def check_kind(dataset: Dataset) -> None:
    """Raises HeaderProblem "not-mr-image" or "not-grey"."""
    sop_class, modality = text(value_of(dataset, "SOPClassUID")), text(value_of(dataset, "Modality"))
    if sop_class not in MR_CLASSES or modality not in ("MR", ""):
        known = UID(sop_class).name if sop_class else "not stated"
        raise HeaderProblem("not-mr-image", f"modality '{modality or 'not stated'}', SOP class {known}")
    if "SamplesPerPixel" in dataset and number(value_of(dataset, "SamplesPerPixel")) != 1:
        raise HeaderProblem("not-grey", f"{text(value_of(dataset, 'SamplesPerPixel'))} samples per pixel")


def matrix_of(dataset: Dataset) -> tuple[int, int, int]:
    """Rows, columns and number of frames. Raises HeaderProblem "no-pixels" or "damaged"."""
    rows, columns = number(value_of(dataset, "Rows")), number(value_of(dataset, "Columns"))
    if isnan(rows) or isnan(columns) or rows < 1 or columns < 1:
        raise HeaderProblem("no-pixels", "no matrix size")
    count = number(value_of(dataset, "NumberOfFrames")) if "NumberOfFrames" in dataset else 1.0
    if isnan(count) or not 1 <= count <= MOST_FRAMES or count % 1:
        raise HeaderProblem("damaged", f"{text(value_of(dataset, 'NumberOfFrames'))!r} frames")
    if not is_enhanced(dataset) and count != 1:
        raise HeaderProblem("damaged", "several frames without functional groups")
    return int(rows), int(columns), int(count)


def is_enhanced(dataset: Dataset) -> bool:
    """Whether the object keeps its frames in functional groups."""
    return "SharedFunctionalGroupsSequence" in dataset or "PerFrameFunctionalGroupsSequence" in dataset


def check_size(dataset: Dataset, rows: int, columns: int, frames: int) -> None:
    """Compare what the header claims with the bytes that are there.

    Raises
    ------
    HeaderProblem
        "no-pixels", "too-large", "damaged" or "truncated".
    """
    if "PixelData" not in dataset:
        raise HeaderProblem("no-pixels")
    allocated = number(value_of(dataset, "BitsAllocated"))
    if allocated not in (8, 16, 32):
        raise HeaderProblem("damaged", f"{text(value_of(dataset, 'BitsAllocated'))!r} bits allocated per pixel")
    pixels = rows * columns * frames
    if rows * columns > LARGEST_FRAME or pixels > LARGEST_FILE:
        raise HeaderProblem("too-large", f"{frames} frames of {rows} x {columns}")
    needed, found = pixels * int(allocated) // 8, len(dataset.PixelData)
    if is_compressed(dataset):
        if needed > max(FREE, LARGEST_RATIO * found):
            raise HeaderProblem("too-large", f"{frames} frames of {rows} x {columns} out of {found} bytes")
    elif found < needed:
        raise HeaderProblem("truncated", f"{found} bytes of pixel data where {needed} are needed")


def syntax_of(dataset: Dataset) -> UID:
    """The transfer syntax that the file states; empty where it states none."""
    return UID(text(dataset.file_meta.get("TransferSyntaxUID"))) if hasattr(dataset, "file_meta") else UID("")


def is_compressed(dataset: Dataset) -> bool:
    """Whether the pixels are encapsulated (PS3.5 A.4)."""
    syntax = syntax_of(dataset)
    known = syntax.is_valid and not syntax.is_private and syntax.is_transfer_syntax
    return bool(known and syntax.is_compressed and not syntax.is_deflated)


def check_inflated(content: bytes) -> None:
    """Refuse a deflated file (PS3.5 A.5) that would grow beyond all reason, before it is inflated at once.

    Raises
    ------
    HeaderProblem
        "too-large".
    zlib.error
        If what should be deflated is not.
    """
    if _DEFLATED not in content[:4096] or content[132:136] != b"\x02\x00\x00\x00":
        return
    start = 144 + int.from_bytes(content[140:144], "little")  # the file meta group states its own length
    packed = content[start:]
    allowed, total = max(FREE, LARGEST_RATIO * len(packed)), 0
    inflater = zlib.decompressobj(-zlib.MAX_WBITS)
    while packed and not inflater.eof:
        total += len(inflater.decompress(packed, 1 << 20))
        packed = inflater.unconsumed_tail
        if total > min(allowed, 4 * LARGEST_FILE):
            raise HeaderProblem("too-large", f"{len(content)} bytes that inflate to more than {total}")
