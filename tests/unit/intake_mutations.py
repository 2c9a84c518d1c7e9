"""Ways to spoil a DICOM file: bytes flipped, cut and repeated; lengths, types and values that lie. Seeded."""

from __future__ import annotations

import io
import struct
import warnings
from collections.abc import Callable

import numpy as np
import pydicom
from pydicom.datadict import dictionary_VR, keyword_for_tag, tag_for_keyword
from pydicom.dataelem import RawDataElement
from pydicom.dataset import Dataset
from pydicom.encaps import encapsulate
from pydicom.sequence import Sequence
from pydicom.tag import Tag
from pydicom.uid import UID

Rng = np.random.Generator
VRS = [b"AE", b"AS", b"AT", b"CS", b"DA", b"DS", b"DT", b"FL", b"FD", b"IS", b"LO", b"LT", b"OB", b"OD", b"OF", b"OW"]
VRS += [
    b"PN",
    b"SH",
    b"SL",
    b"SQ",
    b"SS",
    b"ST",
    b"TM",
    b"UC",
    b"UI",
    b"UL",
    b"UN",
    b"UR",
    b"US",
    b"UT",
    b"\0\0",
    b"zz",
]
SYNTAXES = ["1.2.840.10008.1.2", "1.2.840.10008.1.2.1", "1.2.840.10008.1.2.1.99", "1.2.840.10008.1.2.2"]
SYNTAXES += [f"1.2.840.10008.1.2.4.{k}" for k in (50, 51, 57, 70, 80, 81, 90, 91, 92, 94, 100, 102, 107, 201, 203)]
SYNTAXES += ["1.2.840.10008.1.2.5", "1.2.3", "", "1.2.840.10008.1.2.4.70.5", "x"]
NUMBERS = [
    "NaN",
    "inf",
    "-inf",
    "1e308",
    "-1e308",
    "1e-320",
    "0",
    "-0",
    "-1",
    "1e5",
    "9" * 300,
    "1,5",
    "0x10",
    "",
    " ",
    "-",
]
TEXTS = [
    "",
    "\\",
    "\\\\\\",
    "\0",
    "A" * 70000,
    "<script>alert(1)</script>",
    "../../etc/passwd",
    "=1+1",
    "\ud7ff",
    "%s%n{}",
]
FLOATS = [np.nan, np.inf, -np.inf, 0.0, -1.0, 1e308, 1e-320]
_PACKED = {"US": "<u2", "SS": "<i2", "UL": "<u4", "SL": "<i4", "FD": "<f8", "FL": "<f4"}
INTS = [0, 1, -1, 2, 3, 7, 8, 12, 15, 16, 17, 32, 255, 256, 4095, 32767, 65535]
TIMING = ["InversionTime", "EchoTime", "RepetitionTime", "FlipAngle", "EffectiveEchoTime", "InversionTimes"]
TIMING += ["RescaleSlope", "RescaleIntercept", "PixelSpacing", "ImagePositionPatient", "ImageOrientationPatient"]
TIMING += ["SliceThickness", "NumberOfFrames", "Rows", "Columns", "BitsAllocated", "BitsStored", "HighBit"]
TIMING += ["PixelRepresentation", "SamplesPerPixel", "PhotometricInterpretation", "ImageType", "AcquisitionDate"]
TIMING += [
    "AcquisitionTime",
    "AcquisitionDateTime",
    "TimezoneOffsetFromUTC",
    "MagneticFieldStrength",
    "SeriesDescription",
]


def flip(content: bytes, rng: Rng) -> bytes:
    """One to forty bytes changed, half of the time in the header only."""
    out = bytearray(content)
    end = len(out) if rng.random() < 0.4 else min(len(out), 2600)
    for at in rng.integers(0, end, int(rng.integers(1, 41))):
        out[at] = int(rng.integers(256)) if rng.random() < 0.5 else out[at] ^ (1 << int(rng.integers(8)))
    return bytes(out)


def cut(content: bytes, rng: Rng) -> bytes:
    """Shortened at either end, or something missing in the middle."""
    one, other = sorted(int(k) for k in rng.integers(0, len(content), 2))
    return [content[:one], content[one:], content[:one] + content[other:]][int(rng.integers(3))]


def repeat(content: bytes, rng: Rng) -> bytes:
    """A piece again, or somewhere else, or random bytes between."""
    one = int(rng.integers(0, len(content)))
    piece = content[one : one + int(rng.integers(1, 400))]
    at = int(rng.integers(0, len(content)))
    return (
        content[:at] + (piece if rng.random() < 0.6 else rng.bytes(len(piece))) * int(rng.integers(1, 4)) + content[at:]
    )


def lie_in_length(content: bytes, rng: Rng) -> bytes:
    """The stated length of some elements is wrong: huge, undefined, odd or zero."""
    out = bytearray(content)
    for _ in range(int(rng.integers(1, 4))):
        at = _some_element(content, rng)
        if out[at + 4 : at + 6] in (b"OB", b"OW", b"SQ", b"UN", b"UT"):
            value = int(rng.choice([0, 1, 7, 2**16, 2**31 - 1, 2**32 - 2, 2**32 - 1, int(rng.integers(2**32))]))
            out[at + 8 : at + 12] = struct.pack("<I", value)
        else:
            out[at + 6 : at + 8] = struct.pack("<H", int(rng.choice([0, 1, 3, 5, 200, 65534, 65535])))
    return bytes(out)


def lie_in_type(content: bytes, rng: Rng) -> bytes:
    """An element is said to be of another value representation."""
    out = bytearray(content)
    for _ in range(int(rng.integers(1, 4))):
        at = _some_element(content, rng)
        out[at + 4 : at + 6] = VRS[int(rng.integers(len(VRS)))]
    return bytes(out)


def _some_element(content: bytes, rng: Rng) -> int:
    """Where an explicit element of the header begins, about."""
    for _ in range(60):
        at = content.find(
            bytes([int(rng.choice([0x08, 0x10, 0x18, 0x20, 0x28, 0x40, 0xE0, 0x02]))]), int(rng.integers(132, 2600))
        )
        if 0 < at < len(content) - 14 and content[at + 4 : at + 6].isalpha() and content[at + 4 : at + 6].isupper():
            return at
    return 132


def spoil_values(content: bytes, rng: Rng) -> bytes:
    """Some elements, those that matter most of all, get values that no scanner writes."""
    dataset = _read(content)
    holders = [dataset, *_below(dataset)]
    for _ in range(int(rng.integers(1, 4))):
        if rng.random() < 0.6:
            keyword = TIMING[int(rng.integers(len(TIMING)))]
            having = [holder for holder in holders if keyword in holder] or holders[:1]
        else:
            having = [holders[int(rng.integers(len(holders)))]]
            names = [keyword_for_tag(tag) for tag in having[0].keys() if tag != 0x7FE00010]  # noqa: SIM118
            names = [name for name in names if name]
            keyword = names[int(rng.integers(len(names)))] if names else "PatientID"
        if rng.random() < 0.2:
            for holder in having:
                if keyword in holder:
                    delattr(holder, keyword)
            continue
        _put(having[int(rng.integers(len(having)))], keyword, rng)
    return _write(dataset, content)


def _put(holder: Dataset, keyword: str, rng: Rng) -> None:
    """Bytes as they stand, so that pydicom does not refuse to write them."""
    many = int(rng.choice([1, 1, 1, 2, 3, 7, 500]))
    tag = Tag(tag_for_keyword(keyword))
    vr = dictionary_VR(tag).split(" ")[0]
    if vr == "SQ":
        holder[tag] = pydicom.DataElement(tag, "SQ", Sequence([Dataset() for _ in range(int(rng.integers(0, 3)))]))
        return
    if vr in _PACKED:
        choices = FLOATS if vr in ("FD", "FL") else INTS
        packed = [np.array(choices[int(rng.integers(len(choices)))]).astype(_PACKED[vr]).tobytes() for _ in range(many)]
        value = b"".join(packed)
    elif vr in ("DS", "IS"):
        value = "\\".join(NUMBERS[int(rng.integers(len(NUMBERS)))] for _ in range(many)).encode()
    elif vr in ("OB", "OW", "UN"):
        value = rng.bytes(2 * many)
    else:
        value = TEXTS[int(rng.integers(len(TEXTS)))].encode()
    value = value[:65000] + b" " * (len(value[:65000]) % 2)
    holder[tag] = RawDataElement(tag, vr, len(value), value, 0, False, True)


def claim_much(content: bytes, rng: Rng) -> bytes:
    """Matrix and number of frames far beyond what is there, or other bits than there are."""
    dataset = _read(content)
    dataset.Rows, dataset.Columns = (int(k) for k in rng.choice([0, 1, 48, 4096, 65535], 2))
    if rng.random() < 0.5:
        dataset.NumberOfFrames = str(rng.choice([0, 1, 2, 5, 6, 99_999, 2**31 - 1, -1]))
    if rng.random() < 0.5:
        dataset.BitsAllocated = int(rng.choice([0, 1, 8, 16, 24, 32, 64]))
        dataset.BitsStored = int(rng.choice([0, 1, 8, 12, 16, 32, 64]))
        dataset.HighBit = int(rng.choice([0, 7, 11, 15, 40]))
    return _write(dataset, content)


def say_other_syntax(content: bytes, rng: Rng) -> bytes:
    """The bytes are in another transfer syntax than the meta header says."""
    dataset = _read(content)
    was = dataset.file_meta.TransferSyntaxUID
    syntax = UID(SYNTAXES[int(rng.integers(len(SYNTAXES)))])
    if rng.random() < 0.5:
        pixels = dataset.PixelData if rng.random() < 0.3 else rng.bytes(int(rng.integers(0, 4000)))
        pieces = [pixels[k : k + 900] or b"\0\0" for k in range(0, max(len(pixels), 1), 900)]
        dataset.PixelData = encapsulate(pieces, has_bot=bool(rng.random() < 0.5))
    written = _write(dataset, content)
    return written.replace(
        str(was).encode() + b"\0", str(syntax).encode().ljust(len(str(was)) + 1, b"\0")[: len(str(was)) + 1], 1
    )


def nest(content: bytes, rng: Rng) -> bytes:
    """Sequences in sequences, some hundreds or thousands deep, closed or not."""
    depth = int(rng.choice([5, 50, 300, 2000, 20000]))
    opening = b"\x40\x00\x75\x02SQ\0\0\xff\xff\xff\xff\xfe\xff\x00\xe0\xff\xff\xff\xff"
    closing = b"\xfe\xff\x0d\xe0\0\0\0\0\xfe\xff\xdd\xe0\0\0\0\0"
    at = content.find(b"\xe0\x7f\x10\x00")
    return content[:at] + opening * depth + closing * (depth if rng.random() < 0.7 else 3) + content[at:]


def change_frames(content: bytes, rng: Rng) -> bytes:
    """Functional groups lost, doubled, empty, or put where they do not belong."""
    dataset = _read(content)
    groups = dataset.get("PerFrameFunctionalGroupsSequence")
    if groups is None:
        dataset.PerFrameFunctionalGroupsSequence = Sequence([Dataset() for _ in range(int(rng.integers(0, 4)))])
        return _write(dataset, content)
    kind = int(rng.integers(4))
    if kind == 0:
        del groups[int(rng.integers(len(groups))) :]
    elif kind == 1:
        groups.extend([Dataset()] * int(rng.integers(1, 30)))
    elif kind == 2:
        for group in groups:
            for element in [*group]:
                if element.VR == "SQ" and rng.random() < 0.3:
                    group[element.tag].value = Sequence([]) if rng.random() < 0.5 else Sequence([Dataset(), Dataset()])
    else:
        del dataset.SharedFunctionalGroupsSequence
    return _write(dataset, content)


def _read(content: bytes) -> pydicom.FileDataset:
    return pydicom.dcmread(io.BytesIO(content))


def _below(dataset: Dataset) -> list[Dataset]:
    return [
        item for element in dataset if element.VR == "SQ" for each in element.value for item in (each, *_below(each))
    ]


def _write(dataset: pydicom.FileDataset, content: bytes) -> bytes:
    """As bytes; what pydicom cannot write stays as it was."""
    out = io.BytesIO()
    before = pydicom.config.settings.writing_validation_mode
    pydicom.config.settings.writing_validation_mode = pydicom.config.IGNORE
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            dataset.save_as(out)
    except (ValueError, TypeError, AttributeError, struct.error, OverflowError, UnicodeError, KeyError):
        return content
    finally:
        pydicom.config.settings.writing_validation_mode = before
    return out.getvalue()


MUTATIONS: dict[str, Callable[[bytes, Rng], bytes]] = {
    function.__name__: function
    for function in (
        flip,
        cut,
        repeat,
        lie_in_length,
        lie_in_type,
        spoil_values,
        claim_much,
        say_other_syntax,
        nest,
        change_frames,
    )
}


def spoilt(name: str, content: bytes, rng: Rng) -> bytes:
    """The file spoilt in one way; what pydicom remarks on while it is made is not of interest."""
    with warnings.catch_warnings(), np.errstate(all="ignore"):
        warnings.simplefilter("ignore")
        return MUTATIONS[name](content, rng)


def mutated(originals: list[bytes], rng: Rng) -> tuple[str, bytes]:
    """One of the files, spoilt in one way or two."""
    content = originals[int(rng.integers(len(originals)))]
    names = [str(rng.choice(list(MUTATIONS)))]
    content = spoilt(names[0], content, rng)
    if rng.random() < 0.2 and len(content) > 400:
        content = flip(content, rng)
        names.append("flip")
    return " + ".join(names), content
