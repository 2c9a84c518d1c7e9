"""Archives among the files: each member's bytes, one after another, never written anywhere under a name of their own.

Zip, and tar plain or packed with gzip, bzip2 or xz. Archives inside archives are not opened. What an archive may make
of itself is bounded: its members' number, the size of each, and all bytes together against those in the file.
"""

from __future__ import annotations

import bz2
import gzip
import io
import lzma
import struct
import tarfile
import zipfile
import zlib
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import IO, Any

from qa.intake.claims import FREE, LARGEST_RATIO
from qa.intake.holds import hold
from qa.intake.reader import looks_like_dicom
from qa.intake.series import Held
from qa.intake.walk import SYSTEM_FILES

MOST_MEMBERS = 100_000
LARGEST_MEMBER = 512 * 1024 * 1024  # bytes
LARGEST_DIRECTORY = 32 * 1024 * 1024  # bytes of a zip's list of members
HEAD = 512  # bytes by which an archive is known
Member = tuple[str, bytes | Held]

# What the standard library raises on archives that are not what they claim to be.
_BROKEN = (
    tarfile.TarError,
    zipfile.BadZipFile,
    zlib.error,
    lzma.LZMAError,
    struct.error,
    EOFError,
    OSError,
    ValueError,
    ArithmeticError,
    LookupError,
    RuntimeError,
)
_PACKED: dict[bytes, Callable[[Path], Any]] = {
    b"\x1f\x8b": gzip.GzipFile,
    b"BZh": bz2.BZ2File,
    b"\xfd7zXZ\x00": lzma.LZMAFile,
}


def is_archive(head: bytes) -> bool:
    """Whether a file that begins so is taken apart (and is not a DICOM file with an odd preamble)."""
    if head[128:132] == b"DICM":
        return False
    packed = head.startswith((*_PACKED, b"PK\x03\x04", b"PK\x05\x06"))
    return packed or head[257:262] == b"ustar"


def members(path: Path) -> Iterator[Member]:
    """The regular files in an archive: a label that names archive and member, and the bytes or why they are held.

    Bytes that do not look like DICOM are not read to their end. An archive that breaks off gives, after what could be
    read, one held file in its own name.
    """
    size = path.stat().st_size
    room = max(FREE, LARGEST_RATIO * size)
    with path.open("rb") as file:
        head = file.read(HEAD)
    inside = _of_zip(path, room) if head.startswith(b"PK") else _of_tar(path, head, room)
    try:
        yield from inside
    except _TooMuchError as error:
        yield str(path), hold(str(path), "too-large", str(error))
    except _BROKEN as error:
        lines = str(error).splitlines()
        yield str(path), hold(str(path), "damaged-archive", lines[0][:200] if lines else type(error).__name__)


class _TooMuchError(Exception):
    """The archive would grow beyond all reason."""


def _of_zip(path: Path, room: int) -> Iterator[Member]:
    _check_directory(path)
    with zipfile.ZipFile(path) as archive:
        for info in archive.infolist():
            label = _label(path, info.filename)
            if info.is_dir() or _left_by_a_system(info.filename):
                continue
            if info.flag_bits & 0x1:
                yield label, hold(label, "encrypted")
                continue
            try:
                with archive.open(info) as member:
                    content = _read(member, label, min(room, LARGEST_MEMBER))
            except _BROKEN as error:
                yield label, hold(label, "damaged-archive", str(error)[:200])
                continue
            room -= len(content) if isinstance(content, bytes) else 0
            yield label, content


def _check_directory(path: Path) -> None:
    """Look at how long a list of members the zip claims (APPNOTE 4.3.14 and 4.3.16), before it is read."""
    with path.open("rb") as file:
        file.seek(max(0, path.stat().st_size - 66_000))
        tail = file.read()
    at = tail.rfind(b"PK\x05\x06")
    if at < 0 or at + 16 > len(tail):
        raise zipfile.BadZipFile("the list of its members is missing: the file was cut short")
    count, length = struct.unpack("<HI", tail[at + 10 : at + 16])
    long = tail.rfind(b"PK\x06\x06")
    if (count == 0xFFFF or length == 0xFFFFFFFF) and 0 <= long <= len(tail) - 48:
        count, length = struct.unpack("<QQ", tail[long + 32 : long + 48])
    if count > MOST_MEMBERS or length > LARGEST_DIRECTORY:
        raise _TooMuchError(f"an archive of {count} members")


def _of_tar(path: Path, head: bytes, room: int) -> Iterator[Member]:
    opener = next((opens for magic, opens in _PACKED.items() if head.startswith(magic)), None)
    with opener(path) if opener else path.open("rb") as raw:
        stream = _Stream(raw, room)
        count = 0
        with tarfile.open(fileobj=stream, mode="r|") as archive:
            for info in archive:
                count += 1
                if count > MOST_MEMBERS:
                    raise _TooMuchError(f"an archive of more than {MOST_MEMBERS} members")
                stream.since = 0
                if not info.isreg() or _left_by_a_system(info.name):
                    continue
                label = _label(path, info.name)
                member = archive.extractfile(info)
                if member is not None:
                    yield label, _read(member, label, LARGEST_MEMBER)


class _Stream(io.RawIOBase):
    """Bytes of a tar as they are unpacked, counted."""

    def __init__(self, raw: IO[bytes], room: int) -> None:
        self._raw, self._room = raw, room
        self.since = 0  # bytes since the last member began: no header is that long

    def readable(self) -> bool:
        return True

    def read(self, size: int = -1) -> bytes:
        got = self._raw.read(min(size, 1 << 20) if size >= 0 else 1 << 20)
        self.since += len(got)
        self._room -= len(got)
        if self._room < 0 or self.since > 2 * LARGEST_MEMBER:
            raise _TooMuchError("an archive that unpacks to more than its size can explain")
        return got


def _read(member: IO[bytes], label: str, room: int) -> bytes | Held:
    """One member's bytes; held where they are not DICOM, or more than there is room for."""
    head = member.read(132)
    if not looks_like_dicom(head):
        return hold(label, "not-dicom")
    pieces = [head]
    total = len(head)
    while piece := member.read(1 << 20):
        pieces.append(piece)
        total += len(piece)
        if total > room:
            return hold(label, "too-large", f"more than {room} bytes out of an archive")
    return b"".join(pieces)


def _label(path: Path, name: str) -> str:
    """What the member is called in messages: its archive, then its name without what could mislead a terminal."""
    plain = "".join(letter if letter.isprintable() else "?" for letter in name[:300])
    return f"{path}:{plain}"


def _left_by_a_system(name: str) -> bool:
    last = name.rstrip("/").rpartition("/")[2]
    return name.startswith("__MACOSX/") or last.startswith("._") or last in SYSTEM_FILES
