"""Why something moved: what else moved with it, what did not, and what is known about temperature."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from qa.trend.change import Change, measure
from qa.trend.changes import find_changes
from qa.trend.findings import Cause
from qa.trend.pooled import Course
from qa.words import Floats


@dataclass(frozen=True, slots=True)
class Witness:
    """How another course answers the question whether it moved in the same way."""

    course: Course
    size: float  # percent, or percent a year for a slope
    u: float
    unit: str
    answer: str  # "moved", "still" or "cannot say"


def ask(change: Change, course: Course, series: Floats, sd: Floats, along: Sequence[Change] = ()) -> Witness:
    """Whether `series` of `course` moved as `change` did, from its size estimated for the same onset and shape.

    `along` are the other changes found with it: a fault that was mended is two.
    """
    here = np.isfinite(series)
    kind, expected = change.kind, change.size if change.kind == "step" else change.rate
    size, u = measure(change, course.days[here], series[here], sd[here], along=along)
    unit = "%" if kind == "step" else "% a year"
    if not np.isfinite(size):
        return Witness(course, size, u, unit, "cannot say")
    share, u_share = size / expected, u / abs(expected)
    if share - 1.645 * u_share > 0.15 and share + 1.645 * u_share > 0.5:
        return Witness(course, size, u, unit, "moved")
    if share + 1.645 * u_share < 0.5:
        return Witness(course, size, u, unit, "still")
    return Witness(course, size, u, unit, "cannot say")


def why_level(
    change: Change, course: Course, others: Sequence[Course], along: Sequence[Change] = ()
) -> tuple[Cause, tuple[str, ...], list[Course]]:
    """The cause of a change shared by all vials of a course; also the courses that moved with it."""
    same = [o for o in others if o is not course and o.scan == course.scan and o.current == course.current]
    on_scanner = [ask(change, o, o.level, o.level_sd, along) for o in same if o.scanner == course.scanner]
    of_phantom = [
        ask(change, o, o.level, o.level_sd, along)
        for o in same
        if o.phantom == course.phantom and o.scanner != course.scanner
    ]
    reasons = [f"All {len(course.labels)} vials moved together."]
    temperature = _temperature(change, course, along)
    if temperature is not None:
        return "temperature", (*reasons, temperature), []
    with_it = [w.course for w in (*on_scanner, *of_phantom) if w.answer == "moved"]
    reasons += [_said(w, f"{w.course.phantom} on the same scanner") for w in on_scanner]
    reasons += [_said(w, f"{course.phantom} on {w.course.scanner}") for w in of_phantom]
    moved_elsewhere = [w for w in of_phantom if w.answer == "moved"]
    still_elsewhere = [w for w in of_phantom if w.answer == "still"]
    moved_here = [w for w in on_scanner if w.answer == "moved"]
    still_here = [w for w in on_scanner if w.answer == "still"]
    if moved_here and not still_here and not moved_elsewhere:
        return "scanner", tuple(reasons), with_it
    if still_here and not moved_here and not still_elsewhere:
        return "phantom", tuple(reasons), with_it
    if moved_elsewhere and not still_elsewhere and not moved_here:
        return "phantom", tuple(reasons), with_it
    if still_elsewhere and not moved_elsewhere and not still_here:
        return "scanner", tuple(reasons), with_it
    if not on_scanner and not of_phantom:
        reasons.append(
            f"{course.phantom} is measured on no other scanner and {course.scanner} measures no other phantom, so the "
            "phantom as a whole cannot be ruled out."
        )
        return "scanner", tuple(reasons), []
    if moved_here or moved_elsewhere or still_here or still_elsewhere:
        reasons.append("The other courses contradict each other.")
        return "unknown", tuple(reasons), []
    return "scanner", (*reasons, "The other courses are too short or too noisy to confirm it."), []


def _said(witness: Witness, name: str) -> str:
    if witness.answer == "cannot say":
        return f"{name} cannot say (too few runs or too much scatter)."
    verb = "moved with it" if witness.answer == "moved" else "did not move"
    return f"{name} {verb} ({witness.size:+.1f} ± {witness.u:.1f} {witness.unit}, same onset and shape)."


def _temperature(change: Change, course: Course, along: Sequence[Change]) -> str | None:
    """A sentence, if the temperature explains the change; None if it does not."""
    here = np.isfinite(course.level) & ~course.wild_run
    t, y, celsius, sd = course.days[here], course.level[here], course.celsius[here], course.level_sd[here]
    after = t >= change.onset
    missing = ~np.isfinite(celsius)
    if after.any() and (~after).any():
        share_after, share_before = float(missing[after].mean()), float(missing[~after].mean())
        if share_after - share_before > 0.5:
            return (
                f"{share_after:.0%} of the runs since the onset have no temperature and stand uncorrected, against "
                f"{share_before:.0%} before."
            )
    known = ~missing
    if known.mean() < 0.8 or known.sum() < 8 or np.std(celsius[known]) < 0.15:
        return None
    x = celsius[known] - celsius[known].mean()
    weight = 1.0 / sd[known] ** 2
    centred = y[known] - np.average(y[known], weights=weight)
    x = x - np.average(x, weights=weight)
    per_k = float((weight * x) @ centred / (weight @ (x * x)))
    without = find_changes(t[known], y[known] - per_k * x, sd[known], alpha=0.01)
    total = float(weight @ centred**2)
    by_temperature = per_k**2 * float(weight @ (x * x)) / total
    part = np.sum([one.at(t[known]) for one in (change, *along)], axis=0)
    rest = centred - (part - np.average(part, weights=weight))
    by_change = 1.0 - float(weight @ rest**2) / total
    if by_temperature > by_change and not without:
        return f"The level follows the phantom's temperature ({per_k:+.1f} % per kelvin left after correction)."
    return None


def why_vial(
    change: Change,
    label: str,
    moved: Sequence[Course],
    still: Sequence[Course],
    silent: int,
    several: bool,
) -> tuple[Cause, tuple[str, ...]]:
    """The cause of a change in one vial, given the courses of its phantom in which it moved and did not."""
    others = len(moved[0].labels) - 1
    reasons = [f"Vial {label} moved apart from the other {others} vials."]
    names = sorted({c.scanner for c in moved})
    if not several:
        reasons.append(
            f"{moved[0].phantom} is measured on {names[0]} only, so its place on that scanner cannot be ruled out."
        )
        return "vial", tuple(reasons)
    if still:
        reasons.append(f"It moved on {_join(names)} but not on {_join(sorted({c.scanner for c in still}))}.")
        return "unknown", tuple(reasons)
    if len(names) > 1:
        reasons.append(f"It moved alike on {_join(names)}.")
    if silent:
        reasons.append(f"{silent} more scanner{'s' if silent > 1 else ''} cannot say (too few runs).")
    return "vial", tuple(reasons)


def _join(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
