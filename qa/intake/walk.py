"""Which files there are below the given paths: regular files only, each once, in an order that never varies."""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator
from pathlib import Path

from qa.errors import UsageError

# What systems leave in folders by themselves: passed over, not counted.
SYSTEM_FILES = frozenset({".DS_Store", "Thumbs.db", "desktop.ini", ".directory"})


def files_below(paths: Iterable[Path]) -> Iterator[Path]:
    """Every regular file named or below a named folder.

    Symbolic links to files are read; linked folders are not entered (a loop could not end). Sockets, pipes and
    devices are passed over.

    Raises
    ------
    UsageError
        If a named path does not exist.
    """
    seen: set[tuple[int, int]] = set()
    for path in paths:
        if not path.exists():
            raise UsageError("there is no such file or folder", str(path), "Check the path and run the command again.")
        if path.is_file():
            yield from _once(path, seen)
            continue
        for folder, inner, names in os.walk(path, followlinks=False):
            inner.sort()
            for name in sorted(names):
                if name not in SYSTEM_FILES and not name.startswith("._"):
                    yield from _once(Path(folder) / name, seen)


def _once(path: Path, seen: set[tuple[int, int]]) -> Iterator[Path]:
    try:
        status = path.stat()
    except OSError:
        yield path  # a broken link or a forbidden file: reading it will say what is wrong
        return
    identity = (status.st_dev, status.st_ino)
    if path.is_file() and identity not in seen:
        seen.add(identity)
        yield path
