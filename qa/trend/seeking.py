"""Seeks changes: in single vials first, over all scanners of their phantom at once, then in what vials share."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from qa.trend.attribute import ask, why_level, why_vial
from qa.trend.change import Change, wild
from qa.trend.changes import find_changes
from qa.trend.findings import Finding
from qa.trend.levels import FEWEST_VIALS
from qa.trend.pooled import Course
from qa.trend.raising import Raising, stands
from qa.trend.standing import RELEVANT
from qa.trend.streams import Ints, natural
from qa.words import Floats

_LEAST_SCATTER = 0.01  # percent
_TOGETHER_DAYS = 28.0  # onsets this near each other may be one change


def vial_findings(courses: Sequence[Course], raising: Raising) -> list[Finding]:
    """What moved in single vials; the courses then know it and work out their levels again without it."""
    findings: list[Finding] = []
    families: dict[tuple[str, str], list[Course]] = {}
    for course in courses:
        if len(course.labels) >= 2:
            families.setdefault((course.phantom, course.scan), []).append(course)
    for family in families.values():
        for label in sorted({label for c in family for label in c.labels}, key=natural):
            findings += _vial(label, [c for c in family if label in c.labels], raising)
    for course in courses:
        if course.aged:
            course.relevel()
    return findings


def _vial(label: str, family: list[Course], raising: Raising) -> list[Finding]:
    if max(len(c.labels) for c in family) < FEWEST_VIALS:
        return []
    several = len({c.scanner for c in family}) > 1
    findings: list[Finding] = []
    rest = {id(c): c.own_of(label) for c in family}
    shared = _changes(label, family, rest, raising.vial_alpha)
    for change in shared:
        findings += _vial_change(label, change, shared, family, rest, several, raising)
    if several:  # in one scanner only
        for course in family:
            series = rest[id(course)] - np.sum([c.at(course.days) for c in course.aged.get(label, [])], axis=0)
            own = _changes(label, [course], {id(course): series}, raising.vial_alpha)
            for change in own:
                left = {**rest, id(course): series}
                findings += _vial_change(label, change, own, family, left, several, raising, course)
    return findings


def _vial_change(
    label: str,
    change: Change,
    changes: Sequence[Change],
    family: list[Course],
    rest: dict[int, Floats],
    several: bool,
    raising: Raising,
    only: Course | None = None,
) -> list[Finding]:
    crossing = [c for c in family if c.days[-1] >= change.onset and c.days[0] < change.onset]
    along = [other for other in changes if other is not change]
    answers = [
        ask(change, c, rest[id(c)], np.full(len(c.days), c.sd[c.labels.index(label)]), along)
        for c in crossing
        if c is not only
    ]
    moved = [w.course for w in answers if w.answer == "moved"] + ([only] if only is not None else [])
    still = [w.course for w in answers if w.answer == "still"]
    if not moved:
        moved = crossing[:1] or family[:1]
    if still and only is None:  # its size is that on the scanners where it moved
        change = min(
            _changes(label, moved, rest, raising.vial_alpha),
            key=lambda one: abs(one.onset - change.onset),
            default=change,
        )
    watch = raising.limits_of(moved[0], (label,))[0]
    if abs(change.size) < RELEVANT * watch:
        return []
    for course in moved:
        course.aged.setdefault(label, []).append(change)
    cause, reasons = why_vial(change, label, moved, still, len(crossing) - len(moved) - len(still), several)
    now = stands([(c.days, c.own_of(label)) for c in moved if c.current], change)
    return [raising.finding(change, moved, (label,), cause, reasons, now, f"vial {label}")]


def level_findings(courses: Sequence[Course], raising: Raising) -> list[Finding]:
    """What moved in common to all vials of a course, courses that moved alike together in one finding."""
    found: list[tuple[Change, Course]] = []
    for course in courses:
        here = np.isfinite(course.level) & ~course.wild_run
        alpha = raising.level_alpha
        least = RELEVANT * raising.limits_of(course, course.labels)[0]
        changes = find_changes(course.days[here], course.level[here], course.level_sd[here], alpha=alpha)
        found += [(change, course) for change in changes if abs(change.size) >= least]
    findings: list[Finding] = []
    taken: set[int] = set()
    found.sort(key=lambda pair: pair[0].chance)
    for number, (change, course) in enumerate(found):
        if number in taken:
            continue
        along = [other for other, where in found if where is course and other is not change]
        cause, reasons, with_it = why_level(change, course, courses, along)
        together = [course]
        if cause in ("scanner", "phantom"):
            together += with_it
            taken |= {
                n
                for n, (c, other) in enumerate(found)
                if n > number
                and other in with_it
                and c.earliest <= change.latest + _TOGETHER_DAYS
                and change.earliest <= c.latest + _TOGETHER_DAYS
                and np.sign(c.size) == np.sign(change.size)
            }
        now = stands([(c.days, c.level) for c in together], change)
        subject = f"all vials of {course.phantom}" if cause == "phantom" else "all vials"
        findings.append(raising.finding(change, together, course.labels, cause, reasons, now, subject))
    return findings


def _changes(label: str, family: Sequence[Course], series: dict[int, Floats], alpha: float) -> tuple[Change, ...]:
    """Changes of one vial over several courses at once, each with a level of its own."""
    t, y, sd, group = [], [], [], []
    for number, course in enumerate(family):
        values = series[id(course)]
        noise = np.full(len(values), max(float(course.sd[course.labels.index(label)]), _LEAST_SCATTER))
        here = np.isfinite(values) & ~wild(values, noise)
        if here.sum() >= 3:
            t.append(course.days[here])
            y.append(values[here])
            sd.append(noise[here])
            group.append(np.full(int(here.sum()), number, dtype=np.intp))
    if not t:
        return ()
    groups: Ints = np.concatenate(group)
    return find_changes(np.concatenate(t), np.concatenate(y), np.concatenate(sd), groups, alpha=alpha)
