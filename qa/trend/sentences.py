"""How numbers and streams are said in the sentences of this room."""

from __future__ import annotations

import math

from qa.trend.streams import natural


def decimals(u: float) -> int:
    """Decimals that suit a standard uncertainty: two significant digits where it begins with 1 or 2, else one."""
    if not math.isfinite(u) or u <= 0:
        return 1
    power = math.floor(math.log10(u))
    lead = u / 10.0**power
    return max(0, min(4, -power + (1 if lead < 2.95 else 0)))


def percent(value: float, u: float | None = None, *, sign: bool = True) -> str:
    """'+5.8 % ± 0.6 %': value and standard uncertainty (k = 1), rounded as the uncertainty asks."""
    if u is None or not math.isfinite(u):
        return f"{value:+.1f} %" if sign else f"{value:.1f} %"
    places = decimals(u)
    return f"{value:{'+' if sign else ''}.{places}f} % ± {u:.{places}f} %"


def plain(limit: float) -> str:
    """A limit as its author wrote it: '5 %', '2.5 %'."""
    return f"{limit:g} %"


def vials(labels: list[str]) -> str:
    """'vial 7', 'vials 2, 7 and 11'."""
    ordered = sorted(labels, key=natural)
    if len(ordered) == 1:
        return f"vial {ordered[0]}"
    return f"vials {', '.join(ordered[:-1])} and {ordered[-1]}"


def capital(sentence: str) -> str:
    """The sentence with its first letter raised."""
    return sentence[:1].upper() + sentence[1:]


def quantity_name(quantity: str, scan: str, several: bool) -> str:
    """'T1', or 'T2 (T2 train)' where several scans measure that quantity."""
    return f"{quantity} ({scan})" if several else quantity


def counted(acting: int, watching: int, judged: int) -> str:
    """'3 of 14 vials beyond the action limit', or what comes nearest to it."""
    if acting:
        return f"{acting} of {judged} vials beyond the action limit"
    return f"{watching} of {judged} vials beyond the watch limit" if watching else f"{judged} vials together"
