"""The archive: every original file of a run, kept under the SHA-256 of its content so that it can be measured again."""

from __future__ import annotations

import hashlib
import os
import tempfile
from collections import deque
from concurrent.futures import Future, ThreadPoolExecutor
from pathlib import Path

from qa.errors import AlteredError, ArchiveError

_WRITERS = 4
_MOST_WAITING = 64  # files in memory that are still to be written


def content_hash(content: bytes) -> str:
    """SHA-256 of the content, 64 hex digits (FIPS 180-4)."""
    return hashlib.sha256(content).hexdigest()


class Archive:
    """A folder of files named by their content, fanned out over 256 folders.

    A file appears under its name whole or not at all (written aside, brought to the disk, then renamed). Some threads
    write behind the caller's back; `settle` waits for them, and whoever records a file in a database calls it first.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._writers: ThreadPoolExecutor | None = None
        self._waiting: deque[Future[Path]] = deque()
        self._folders: set[Path] = set()

    def path(self, sha256: str) -> Path:
        """Where content of that hash lies, if it does."""
        return self.folder / sha256[:2] / f"{sha256}.dcm"

    def put(self, content: bytes, sha256: str | None = None) -> str:
        """Keep `content`; gives its hash. Content that is there already is not written again.

        Raises
        ------
        ArchiveError
            If the folder cannot be read, or an earlier file could not be written.
        """
        name = sha256 or content_hash(content)
        target = self.path(name)
        try:
            if target.stat().st_size == len(content):
                return name
        except FileNotFoundError:
            pass
        except OSError as error:
            raise ArchiveError(f"cannot be read: {error.strerror}", str(target)) from error
        if self._writers is None:
            self._writers = ThreadPoolExecutor(_WRITERS, "archive")
        self._waiting.append(self._writers.submit(_write, target, content))
        while len(self._waiting) > _MOST_WAITING:
            self._folders.add(self._waiting.popleft().result())
        return name

    def settle(self) -> None:
        """Wait until all files put so far, and their folders, are on the disk (fsync).

        Raises
        ------
        ArchiveError
            If a file could not be written.
        """
        writers, self._writers = self._writers, None
        if writers is None:
            return
        with writers:
            while self._waiting:
                self._folders.add(self._waiting.popleft().result())
            list(writers.map(_sync_folder, self._folders))
            self._folders.clear()

    def read(self, sha256: str) -> bytes:
        """The content of that hash.

        Raises
        ------
        ArchiveError
            If it is not there, cannot be read, or is no longer what its name says.
        """
        path = self.path(sha256)
        remedy = "Restore the archive folder from its backup."
        try:
            content = path.read_bytes()
        except FileNotFoundError as error:
            raise ArchiveError("the original is not in the archive", str(path), remedy) from error
        except OSError as error:
            raise ArchiveError(f"cannot be read: {error.strerror}", str(path), remedy) from error
        if content_hash(content) != sha256:
            raise AlteredError("the original was altered: its content is not what its name says", str(path), remedy)
        return content


def _write(target: Path, content: bytes) -> Path:
    """Write one file whole, on the disk before it has its name; gives its folder."""
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        handle, aside = tempfile.mkstemp(prefix=".part-", dir=target.parent)
        try:
            with os.fdopen(handle, "wb") as file:
                file.write(content)
                file.flush()
                os.fchmod(file.fileno(), 0o444)
                os.fsync(file.fileno())
            os.replace(aside, target)
        except OSError:
            Path(aside).unlink(missing_ok=True)
            raise
    except OSError as error:
        remedy = "Make room on the disk, or mend the folder's permissions, and ingest again: nothing is lost."
        raise ArchiveError(f"cannot be written: {error.strerror}", str(target), remedy) from error
    return target.parent


def _sync_folder(folder: Path) -> None:
    try:
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
    except OSError as error:
        raise ArchiveError(f"cannot be brought to the disk: {error.strerror}", str(folder)) from error
