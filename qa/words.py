"""The words every room shares: verdicts, quantities, states and remarks. No logic of any room lives here."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Pixels = NDArray[np.float32]
Ints = NDArray[np.intp]


class Quantity(StrEnum):
    """What is measured in a vial."""

    T1 = "T1"
    T2 = "T2"


class Verdict(StrEnum):
    """What a run, scanner or stream may be told, in rising order of need: see `worst`."""

    STEADY = "steady"
    WATCH = "watch"
    ACT = "act"
    VOID = "void"


class State(StrEnum):
    """How far one reading can be trusted. Only GOOD and MARKED carry a number."""

    GOOD = "good"
    MARKED = "marked"  # usable, but read its notes (noise floor near, few voxels, T2 > T1 within doubt)
    NOT_DETERMINED = "not determined"  # this recipe cannot determine it; the notes say why
    VOID = "void"  # something went wrong; the notes say what


class Consequence(StrEnum):
    """What follows from a remark about a run."""

    NOTE = "note"
    WATCH = "watch"
    VOID = "void"


@dataclass(frozen=True, slots=True)
class Remark:
    """One named observation about a run, scan or reading. Checks return remarks; one place decides."""

    code: str  # short and stable: "tr-differs"
    text: str  # a sentence a physicist can act on, with numbers and units
    consequence: Consequence = Consequence.NOTE
    subject: str = ""  # a scan's name or a vial's label; empty: the whole run


def worst(verdicts: list[Verdict]) -> Verdict:
    """The verdict that needs most attention: act, then void, then watch, then steady (for none: steady)."""
    order = [Verdict.STEADY, Verdict.WATCH, Verdict.VOID, Verdict.ACT]
    return max(verdicts, key=order.index, default=Verdict.STEADY)
