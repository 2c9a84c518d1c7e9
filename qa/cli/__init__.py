"""Command line: thin calls into the library, messages and exit codes; one module per command."""

from __future__ import annotations

import sys


def main() -> None:
    """The command ``vialbook``."""
    from qa.cli.app import run

    for stream in (sys.stdout, sys.stderr):
        stream.reconfigure(errors="backslashreplace")  # type: ignore[union-attr]  # a terminal of another encoding
    sys.exit(run(sys.argv[1:]))
