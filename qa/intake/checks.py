"""Does a scan hold what the recipe states? A table of small checks; each gives remarks, none decides what follows."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from qa.site.recipe import Recipe, Scan
from qa.words import Consequence, Floats, Quantity, Remark

FAR_OFF = 0.1  # a TR further off than this part of the recipe's is another protocol, not a drift of it


def check_scan(scan: Scan, ti_ms: Floats, te_ms: Floats, tr_ms: Floats) -> list[Remark]:
    """All departures of one scan's times (ms, one per frame, NaN where not stated) from the recipe.

    The recipe's own `consequence` table overrides what usually follows from a remark.
    """
    found = [remark for check in CHECKS for remark in check(scan, ti_ms, te_ms, tr_ms)]
    return [replace(r, consequence=scan.consequence.get(r.code, r.consequence), subject=scan.name) for r in found]


def missing_scans(recipe: Recipe, present: Sequence[str]) -> list[Remark]:
    """A remark for each scan of the recipe of which there is nothing."""
    remarks = []
    for scan in recipe.scans:
        if scan.name not in present:
            wanted = ", ".join(f"{keyword} matching '{pattern}'" for keyword, pattern in scan.match.items())
            text = f"scan '{scan.name}' is missing: no usable image has {wanted}"
            usual = scan.consequence.get("scan-missing", Consequence.WATCH)
            remarks.append(Remark("scan-missing", text, usual, scan.name if usual is not Consequence.VOID else ""))
    return remarks


def _inversion_times(scan: Scan, ti_ms: Floats, te_ms: Floats, tr_ms: Floats) -> list[Remark]:
    if scan.quantity is not Quantity.T1 or not scan.ti_ms:
        return []
    return _against("TI", "ti", np.asarray(scan.ti_ms), ti_ms, scan.tolerance_percent)


def _echo_times(scan: Scan, ti_ms: Floats, te_ms: Floats, tr_ms: Floats) -> list[Remark]:
    if scan.quantity is not Quantity.T2 or not scan.te_ms:
        return []
    return _against("TE", "te", np.asarray(scan.te_ms), te_ms, scan.tolerance_percent)


def _repetition_time(scan: Scan, ti_ms: Floats, te_ms: Floats, tr_ms: Floats) -> list[Remark]:
    if scan.tr_ms is None:
        return []
    stated = tr_ms[np.isfinite(tr_ms)]
    if len(stated) == 0:
        return [Remark("tr-unknown", f"the files do not state TR; the recipe's {scan.tr_ms:g} ms is taken")]
    off = stated[np.abs(stated - scan.tr_ms) > scan.tolerance_percent / 100.0 * scan.tr_ms]
    if len(off) == 0:
        return []
    text = f"TR is {_listed(np.unique(off))} ms, the recipe says {scan.tr_ms:g} ms"
    if float(np.max(np.abs(off - scan.tr_ms))) > FAR_OFF * scan.tr_ms:
        return [
            Remark("tr-far-off", f"{text}: this is another protocol; scan again with the right one", Consequence.VOID)
        ]
    return [Remark("tr-differs", text, Consequence.WATCH)]


CHECKS: tuple[Callable[[Scan, Floats, Floats, Floats], list[Remark]], ...] = (
    _inversion_times,
    _echo_times,
    _repetition_time,
)


def _against(name: str, code: str, wanted: Floats, found: Floats, tolerance_percent: float) -> list[Remark]:
    """Times of the recipe that no frame has, and times that the recipe does not have."""
    room = np.maximum(tolerance_percent / 100.0 * wanted, 0.5)
    apart = np.abs(found[None, :] - wanted[:, None])
    lost = wanted[~np.any(apart <= room[:, None], axis=1)]
    extra = found[~np.any(apart <= room[:, None], axis=0)]
    if len(lost) and len(lost) == len(extra):
        text = f"{name} is {_listed(extra)} ms where the recipe says {_listed(lost)} ms; the times in the data are used"
        return [Remark(f"{code}-differs", text, Consequence.WATCH)]
    remarks = []
    if len(lost):
        text = f"{name} {_listed(lost)} ms of the recipe {'is' if len(lost) == 1 else 'are'} missing"
        remarks.append(Remark(f"{code}-missing", text, Consequence.WATCH))
    if len(extra):
        text = f"{name} {_listed(extra)} ms {'is' if len(extra) == 1 else 'are'} not in the recipe; used all the same"
        remarks.append(Remark(f"{code}-extra", text, Consequence.NOTE))
    return remarks


def _listed(values: Floats) -> str:
    return ", ".join(f"{value:g}" for value in values)
