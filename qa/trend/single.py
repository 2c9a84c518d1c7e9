"""Findings that are no change of level within a stretch: limits, wild runs, wider scatter, steps across restarts."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import date
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import fdtrc

from qa.site.limits import LimitBlock, in_force
from qa.trend.baseline import Segment, nanmedian
from qa.trend.findings import Finding, FindingKind, day_of, key
from qa.trend.logbook import near
from qa.trend.pooled import Course
from qa.trend.sentences import percent, plain, vials
from qa.trend.streams import Block
from qa.words import Quantity, Verdict

if TYPE_CHECKING:
    import pandas as pd

_RECENT = 8  # runs whose scatter is compared with all before
_CHANCE = 1e-4


def _plain_finding(
    course: Course,
    kind: FindingKind,
    verdict: Verdict,
    labels: tuple[str, ...],
    days: float,
    size: float,
    interval: tuple[float, float] | None,
    reasons: tuple[str, ...],
    sentence: str,
    log: pd.DataFrame | None,
    *,
    past: bool = False,
    tag: object = "",
) -> Finding:
    day = day_of(days)
    return Finding(
        key(course.scanner, course.phantom, course.scan, kind, course.segment.first, tag),
        course.scanner,
        course.phantom,
        (course.scanner,),
        (course.phantom,),
        labels,
        course.quantity,
        course.scan,
        kind,
        verdict,
        day,
        (day, day),
        size,
        interval,
        None,
        None,
        "unknown",
        reasons,
        near(log, (course.scanner,), (course.phantom,), (day, day)),
        None,
        day,
        "past" if past else "open",
        sentence,
    )


def limit_findings(
    course: Course, limits: tuple[LimitBlock, ...], today: date, explained: Mapping[str, float]
) -> list[Finding]:
    """Vials whose last three usable readings lie beyond a limit, less what open findings explain.

    `explained` holds, for vials with open findings, how much those have moved it, percent: such a vial is not named
    again for its baseline, and for its reference only if it were beyond the limit without them.
    """
    rows = slice(course.segment.first, course.segment.last)
    found: dict[str, list[tuple[str, float, Verdict, float]]] = {"reference": [], "baseline": []}
    for column, label in enumerate(course.labels):
        held = in_force(limits, today, Quantity(course.quantity), label, course.scanner)
        place = next(i for i, s in enumerate(course.block.streams) if (s.scan, s.vial) == (course.scan, label))
        for against, series in (
            ("reference", course.block.deviation[rows, place]),
            ("baseline", course.percent[:, column]),
        ):
            block = held.get(against)  # type: ignore[call-overload]
            values = series[np.isfinite(series)]
            if block is None or values.size < 3 or (against == "baseline" and label in explained):
                continue
            values = values[-3:] - explained.get(label, 0.0)
            least = float(np.abs(values).min()) if abs(np.sign(values).sum()) == 3 else 0.0
            if least > block.watch_percent:
                verdict = Verdict.ACT if least > block.act_percent else Verdict.WATCH
                limit = block.act_percent if least > block.act_percent else block.watch_percent
                found[against].append((label, float(np.median(series[np.isfinite(series)][-3:])), verdict, limit))
    findings = []
    last = float(course.days[-1])
    for against, hits in found.items():
        if not hits:
            continue
        labels = tuple(label for label, *_ in hits)
        worst = max(hits, key=lambda hit: abs(hit[1]))
        verdict = Verdict.ACT if any(hit[2] is Verdict.ACT for hit in hits) else Verdict.WATCH
        sentence = (
            f"{course.quantity} of {vials(list(labels))} on {course.scanner} stays beyond a limit from the {against} "
            f"(most: vial {worst[0]}, {percent(worst[1])}, limit {plain(worst[3])})."
        )
        findings.append(
            _plain_finding(
                course,
                "limit",
                verdict,
                labels,
                last,
                worst[1],
                None,
                ("The last three readings of each lie beyond it, on one side.",),
                sentence,
                None,
                tag=against,
            )
        )
    return findings


def run_findings(course: Course, log: pd.DataFrame | None) -> list[Finding]:
    """Whole runs that lie apart from those around them: set-up or temperature, not drift."""
    findings = []
    last = int(np.flatnonzero(np.isfinite(course.level))[-1])
    around = course.level[np.isfinite(course.level) & ~course.wild_run]
    for index in np.flatnonzero(course.wild_run):
        near_runs = course.level[max(0, index - 4) : index + 5]
        near_runs = near_runs[np.isfinite(near_runs)]
        size = float(course.level[index] - np.median(near_runs if near_runs.size > 2 else around))
        spread = 1.4826 * float(np.median(np.abs(np.diff(around)))) / np.sqrt(2.0) if around.size > 2 else 0.0
        if abs(size) < 5.0 * spread:
            continue
        latest = index == last
        run = course.block.runs[course.segment.first + index]
        day = day_of(float(course.days[index]))
        sentence = (
            f"{course.quantity} of all vials on {course.scanner} lies {percent(size)} from the runs around it "
            f"on {day} only" + (": repeat the run before concluding." if latest else "; the runs after it do not.")
        )
        findings.append(
            _plain_finding(
                course,
                "outlier",
                Verdict.WATCH if latest else Verdict.STEADY,
                course.labels,
                float(course.days[index]),
                size,
                None,
                ("One run alone is no drift; position, temperature or recipe of that run are likelier.",),
                sentence,
                log,
                past=not latest,
                tag=run,
            )
        )
    return findings


def spread_findings(course: Course, log: pd.DataFrame | None) -> list[Finding]:
    """Scatter of the vials about the level that has plainly grown in the last runs."""
    own = course.own - np.sum(
        [
            np.outer(c.at(course.days), np.array([label == name for name in course.labels], float))
            for label, changes in course.aged.items()
            for c in changes
        ]
        or [np.zeros_like(course.own)],
        axis=0,
    )
    whole = np.flatnonzero(np.isfinite(own).sum(axis=1) >= 0.5 * own.shape[1])
    if whole.size < 3 * _RECENT:
        return []
    step = np.diff(own[whole], axis=0) / np.sqrt(2.0)
    before, recent = step[:-_RECENT], step[-_RECENT:]
    usual = nanmedian(np.abs(before)) * 1.4826
    usual = np.where(usual > 0, usual, np.nan)
    if not np.isfinite(before / usual).any() or not np.isfinite(recent / usual).any():
        return []
    vials_there = float(np.isfinite(usual).sum())
    ratio = float(np.nanmedian((recent / usual) ** 2) / np.nanmedian((before / usual) ** 2))
    freedom_recent, freedom_before = 0.35 * _RECENT * vials_there, 0.35 * len(before) * vials_there
    chance = float(fdtrc(freedom_recent, freedom_before, ratio))
    if chance > _CHANCE or ratio < 1.5:
        return []
    growth = float(np.sqrt(ratio))
    sentence = (
        f"{course.quantity} on {course.scanner} scatters {growth:.1f} times as much in the last {_RECENT} runs "
        "as before."
    )
    return [
        _plain_finding(
            course,
            "spread",
            Verdict.WATCH,
            course.labels,
            float(course.days[whole[-_RECENT]]),
            100.0 * (growth - 1.0),
            None,
            ("Levels stand, scatter grew: signal-to-noise, coil or position are likelier than a drift.",),
            sentence,
            log,
        )
    ]


def restart_findings(block: Block, stretches: tuple[Segment, ...], log: pd.DataFrame | None) -> list[Finding]:
    """Steps across restarts of the baseline: accepted by whoever restarted it, but never swallowed."""
    findings = []
    for before, after in pairwise(stretches):
        for scan, quantity, columns in block.scans:
            tail = before.percent[:, columns][-8:]
            count = np.isfinite(tail).sum(axis=0)
            if not len(tail) or not (count >= 3).any() or not (after.count[columns] >= 3).any():
                continue
            told = np.where(count >= 3, np.nansum(tail, axis=0) / np.maximum(count, 1), np.nan)
            old = before.mean_ms[columns] * (1.0 + told / 100.0)
            steps = 100.0 * (after.mean_ms[columns] / old - 1.0)
            steps = steps[np.isfinite(steps)]
            if steps.size < 2:
                continue
            size, u = float(np.median(steps)), float(1.2533 * np.std(steps, ddof=1) / np.sqrt(steps.size))
            if abs(size) < max(0.3, 3.0 * u) or after.since is None:
                continue
            first, last = day_of(float(block.days[before.last - 1])), day_of(float(block.days[after.first]))
            sentence = (
                f"{quantity} of all vials on {block.scanner} stepped by {percent(size, u)} across the restart "
                f"of the baseline on {after.since.astype('datetime64[D]')}."
            )
            entries = near(log, (block.scanner,), (block.phantom,), (first, last))
            findings.append(
                Finding(
                    key(block.scanner, block.phantom, scan, "restart", after.first),
                    block.scanner,
                    block.phantom,
                    (block.scanner,),
                    (block.phantom,),
                    tuple(block.streams[c].vial for c in columns),
                    quantity,
                    scan,
                    "step",
                    Verdict.STEADY,
                    last,
                    (first, last),
                    size,
                    (size - 1.645 * u, size + 1.645 * u),
                    None,
                    None,
                    "scanner",
                    ("The baseline was restarted here by a log entry, so this step is accepted and reported only.",),
                    entries,
                    None,
                    last,
                    "past",
                    sentence,
                )
            )
    return findings
