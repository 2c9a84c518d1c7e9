"""Intake room. Enters: DICOM files, folders, zip and tar archives. Leaves: sessions, their calibrated series, and
files held with reasons. Knows nothing of vials or fitting.

`gather` reads files into sessions (headers only) and the archive; `load` decodes a session's pixels into the series of
a recipe; `session_from_archive` and `merge` bring back what came in before. Hold codes are a table in `holds`.
"""

from __future__ import annotations

from qa.intake.archive import Archive
from qa.intake.assemble import Loaded, load
from qa.intake.gather import Intake, gather, merge, session_from_archive
from qa.intake.series import FileRecord, FrameSource, Grid, Held, Series, Session

__all__ = [
    "Archive",
    "FileRecord",
    "FrameSource",
    "Grid",
    "Held",
    "Intake",
    "Loaded",
    "Series",
    "Session",
    "gather",
    "load",
    "merge",
    "session_from_archive",
]
