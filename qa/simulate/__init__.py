"""Simulate room. Enters: a plate, a recipe and what is true (truth.py), or a site folder and a story.
Leaves: folders of synthetic DICOM runs, and a record of the truth in each.

The physics is this room's own: Bloch's equations and phase graphs written for it alone, so that analysing
a simulated run checks the fit rather than repeating it. Knows nothing of intake, locate, fit or the database.
"""

from __future__ import annotations

from qa.simulate.growing import grow, simulate_one
from qa.simulate.run import simulate_run
from qa.simulate.truth import (
    Bubble,
    Inversion,
    PulsePair,
    RunRecord,
    RunTruth,
    ScannerTruth,
    Surroundings,
    VialRecord,
    VialTruth,
    vials_of,
)

__all__ = [
    "Bubble",
    "Inversion",
    "PulsePair",
    "RunRecord",
    "RunTruth",
    "ScannerTruth",
    "Surroundings",
    "VialRecord",
    "VialTruth",
    "grow",
    "simulate_one",
    "simulate_run",
    "vials_of",
]
