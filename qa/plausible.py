"""Checks of one reading against physics: a table of small functions that return a sentence, or None."""

from __future__ import annotations

from math import hypot

from qa.words import Quantity


def doubts(
    quantity: Quantity,
    value_ms: float,
    u_ms: float,
    t1: tuple[float, float] | None,
    voxels: int,
    excluded: int,
    few_voxels: int,
) -> list[str]:
    """Sentences for whatever makes a reading doubtful; an empty list where nothing does.

    Parameters
    ----------
    value_ms, u_ms : the reading and its combined standard uncertainty, ms
    t1 : T1 and its standard uncertainty of the same vial from the same run, ms; None where unknown
    voxels, excluded : voxels measured and voxels left out as outliers
    few_voxels : fewer than this are remarked
    """
    found = [
        _t2_over_t1(quantity, value_ms, u_ms, t1),
        _few(voxels, few_voxels),
        _many_excluded(voxels, excluded),
    ]
    return [sentence for sentence in found if sentence]


def _t2_over_t1(quantity: Quantity, value_ms: float, u_ms: float, t1: tuple[float, float] | None) -> str | None:
    """T2 cannot exceed T1 in a phantom's solution (Bloembergen, Purcell and Pound, Phys Rev 73 (1948) 679)."""
    if quantity is not Quantity.T2 or t1 is None:
        return None
    t1_ms, u_t1_ms = t1
    if value_ms - t1_ms <= 2.0 * hypot(u_ms, u_t1_ms):
        return None
    return f"T2 ({value_ms:.4g} ms) is longer than T1 ({t1_ms:.4g} ms) beyond their uncertainty: physically impossible"


def _few(voxels: int, few_voxels: int) -> str | None:
    return f"only {voxels} voxels lie clear of the vial's wall" if voxels < few_voxels else None


def _many_excluded(voxels: int, excluded: int) -> str | None:
    if excluded <= 0.25 * (voxels + excluded):
        return None
    return f"{excluded} of {voxels + excluded} voxels left out as outliers: a bubble or an artefact?"
