"""One file across the boundary: bytes in, a header or a reason out; whatever the bytes are, nothing is raised."""

from __future__ import annotations

import io
import warnings
from collections import OrderedDict
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from datetime import tzinfo

import pydicom
from pydicom.dataset import Dataset, FileDataset
from pydicom.uid import ExplicitVRBigEndian, ExplicitVRLittleEndian, ImplicitVRLittleEndian

from qa.intake.claims import HeaderProblem, check_inflated
from qa.intake.header import FileHeader, read_header
from qa.intake.holds import hold
from qa.intake.pixels import FOREIGN_BYTES, told
from qa.intake.series import Held

CACHE_BYTES = 256 * 1024 * 1024


class DatasetCache:
    """Parsed files kept until their pixels are wanted, oldest out first, bounded by their size on disk."""

    def __init__(self, largest: int = CACHE_BYTES) -> None:
        self._kept: OrderedDict[str, tuple[int, Dataset]] = OrderedDict()
        self._bytes = 0
        self._largest = largest

    def keep(self, sha256: str, size: int, dataset: Dataset) -> None:
        """Keep a dataset; older ones go when there is no room."""
        if size > self._largest:
            return
        self._kept[sha256] = (size, dataset)
        self._bytes += size
        while self._bytes > self._largest:
            _, (gone, _) = self._kept.popitem(last=False)
            self._bytes -= gone

    def take(self, sha256: str) -> Dataset | None:
        """Give a dataset out, once."""
        size, dataset = self._kept.pop(sha256, (0, None))
        self._bytes -= size
        return dataset


@contextmanager
def quiet_pydicom() -> Iterator[None]:
    """pydicom without remarks on values that break the standard's form: phantom exports are full of them."""
    before = pydicom.config.settings.reading_validation_mode
    pydicom.config.settings.reading_validation_mode = pydicom.config.IGNORE
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    finally:
        pydicom.config.settings.reading_validation_mode = before


def looks_like_dicom(head: bytes) -> bool:
    """The prefix of PS3.10 7.1, or a bare dataset: group 0002 or 0008 first, then a known VR or a short length."""
    if head[128:132] == b"DICM":
        return True
    if len(head) < 8 or head[:2] not in (b"\x02\x00", b"\x08\x00") or head[3] != 0:
        return False
    explicit = head[4:6] in (b"UI", b"CS", b"UL", b"SH", b"LO", b"DA", b"TM", b"OB")
    return explicit or int.from_bytes(head[4:8], "little") < 256


def parse(content: bytes) -> FileDataset:
    """Parse without reading meaning into it.

    Raises HeaderProblem "too-large" on a file that would inflate beyond reason, else one of FOREIGN_BYTES on bytes
    that are no DICOM.
    """
    check_inflated(content)
    dataset = pydicom.dcmread(io.BytesIO(content), force=content[128:132] != b"DICM")
    if not dataset.file_meta.get("TransferSyntaxUID"):  # a bare dataset: as it was found to be encoded
        implicit, little = dataset.original_encoding
        explicit = ExplicitVRLittleEndian if little else ExplicitVRBigEndian
        dataset.file_meta.TransferSyntaxUID = ImplicitVRLittleEndian if implicit else explicit
    return dataset


def read_file(
    content: bytes, path: str, sha256: str, wanted: Iterable[str], zone: tzinfo
) -> tuple[FileHeader, Dataset] | Held:
    """The file's header and dataset, or why it is held."""
    try:
        dataset = parse(content)
        header = read_header(dataset, path, sha256, len(content), wanted, zone)
    except HeaderProblem as problem:
        return hold(path, problem.code, problem.detail, sha256)
    except FOREIGN_BYTES as error:
        return hold(path, "damaged", told(error), sha256)
    return header, dataset
