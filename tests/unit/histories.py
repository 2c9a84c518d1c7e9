"""Synthetic campaigns as tidy frames, for tests of the trend and compare rooms. No DICOM, no fitting."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

# (scanner index, phantom index, vial index, scan index, days since the start) -> percent
Shift = Callable[[int, int, int, int, np.ndarray], np.ndarray]


@dataclass(frozen=True)
class Campaign:
    """What the generator is told; every run of every scanner x phantom pair is on its own time."""

    scanners: Sequence[str] = ("North bay",)
    phantoms: Sequence[str] = ("Plate A",)
    vials: int = 14
    scans: Sequence[tuple[str, str]] = (("T1 IR", "T1"), ("T2 train", "T2"))
    runs: int = 104
    every_days: float = 7.0
    jitter_days: float = 0.0
    start: str = "2024-01-01T07:30:00"
    own_percent: float = 0.6  # independent noise of one vial, median over vials (0.7 to 1.5 of it)
    common_percent: float = 0.2  # noise common to all vials of one run and quantity
    stated_factor: float = 1.3  # stated uncertainty over true scatter
    missing: float = 0.0  # share of runs that never happened
    void: float = 0.0  # share of void runs
    shift: Shift | None = None
    pairs: Sequence[tuple[int, int]] | None = None  # (scanner, phantom) pairs that are measured; None: all
    seed: int = 1
    celsius: float = 20.4
    software: Callable[[int, float], str] = field(default=lambda scanner, day: "S1")


def history(campaign: Campaign) -> pd.DataFrame:
    """The tidy frame of readings of a campaign."""
    c = campaign
    rng = np.random.default_rng(c.seed)
    pairs = c.pairs or [(s, p) for s in range(len(c.scanners)) for p in range(len(c.phantoms))]
    labels = [str(v + 1) for v in range(c.vials)]
    truth = np.geomspace(1900.0, 120.0, c.vials)
    frames = []
    for s, p in pairs:
        days = np.arange(c.runs) * c.every_days + rng.uniform(-0.5, 0.5, c.runs) * c.jitter_days + 0.1 * p
        days = days[rng.random(c.runs) >= c.missing]
        void = rng.random(days.size) < c.void
        celsius = c.celsius + 0.2 * rng.standard_normal(days.size)
        for q, (scan, quantity) in enumerate(c.scans):
            own = c.own_percent * np.geomspace(1.4, 0.72, c.vials)[::-1]
            bias = rng.normal(0.0, 1.0, c.vials)
            noise = own * rng.standard_normal((days.size, c.vials))
            noise += c.common_percent * rng.standard_normal((days.size, 1))
            deviation = bias + noise
            if c.shift is not None:
                deviation = deviation + np.stack([c.shift(s, p, v, q, days) for v in range(c.vials)], axis=1)
            reference = truth if quantity == "T1" else truth / 9.0
            value = reference * (1.0 + deviation / 100.0)
            size = value.size
            run = [f"{c.scanners[s]}-{c.phantoms[p]}-{k:04d}" for k in range(days.size)]
            when = pd.Timestamp(c.start, tz="UTC") + pd.to_timedelta(np.round(days * 86400.0), unit="s")
            frames.append(
                pd.DataFrame(
                    {
                        "run": np.repeat(run, c.vials),
                        "generation": 1,
                        "scanner": c.scanners[s],
                        "phantom": c.phantoms[p],
                        "vial": labels * days.size,
                        "quantity": quantity,
                        "scan": scan,
                        "acquired": np.repeat(np.asarray(when.tz_convert(None)), c.vials),
                        "value_ms": value.ravel(),
                        "u_ms": (value * own * c.stated_factor / 100.0).ravel(),
                        "value_at_reference_ms": value.ravel(),
                        "u_at_reference_ms": (value * own * c.stated_factor / 100.0).ravel(),
                        "reference_ms": np.tile(reference, days.size),
                        "u_reference_ms": np.tile(reference * 0.005, days.size),
                        "deviation_percent": deviation.ravel(),
                        "u_deviation_percent": np.tile(own * c.stated_factor, days.size),
                        "state": "good",
                        "notes": "",
                        "method": "m",
                        "method_version": "1",
                        "voxels": 100,
                        "celsius": np.repeat(celsius, c.vials),
                        "software": np.repeat([c.software(s, d) for d in days], c.vials),
                        "coil": "head",
                        "run_void": np.repeat(void, c.vials),
                    },
                    index=range(size),
                )
            )
    frame = pd.concat(frames, ignore_index=True)
    frame["acquired"] = pd.to_datetime(frame["acquired"], utc=True)
    return frame.sort_values("acquired", kind="stable", ignore_index=True)


def runs(readings: pd.DataFrame) -> pd.DataFrame:
    """The tidy frame of runs that goes with a history (the columns this room reads)."""
    first = readings.groupby("run", sort=False).first().reset_index()
    frame = first[["run", "generation", "scanner", "phantom", "acquired", "celsius", "software", "coil"]].copy()
    frame["remarks"] = [[] for _ in range(len(frame))]
    return frame.sort_values("acquired", ignore_index=True)


def log(*entries: dict[str, object]) -> pd.DataFrame:
    """The tidy frame of log entries; each entry needs at least `at`."""
    base = {
        "scanner": None,
        "phantom": None,
        "kind": "note",
        "text": "",
        "restart_baseline": False,
        "source": "person",
        "who": "A. Tester",
    }
    rows = [{"entry": str(number + 1), **base, **entry} for number, entry in enumerate(entries)]
    frame = pd.DataFrame(rows, columns=["entry", "at", *base])
    frame["at"] = pd.to_datetime(frame["at"], utc=True)
    return frame


def step(
    at_day: float,
    percent: float,
    *,
    scanner: int | None = None,
    vial: int | None = None,
    phantom: int | None = None,
    scan: int | None = None,
) -> Shift:
    """A step of `percent` from `at_day` on; selectors left out mean all."""

    def shift(s: int, p: int, v: int, q: int, days: np.ndarray) -> np.ndarray:
        chosen = scanner in (None, s) and phantom in (None, p) and vial in (None, v) and scan in (None, q)
        return percent * (days >= at_day) if chosen else np.zeros_like(days)

    return shift


def slope(
    per_year: float,
    from_day: float = 0.0,
    *,
    scanner: int | None = None,
    vial: int | None = None,
    phantom: int | None = None,
    scan: int | None = None,
) -> Shift:
    """A slope of `per_year` percent from `from_day` on; selectors left out mean all."""

    def shift(s: int, p: int, v: int, q: int, days: np.ndarray) -> np.ndarray:
        chosen = scanner in (None, s) and phantom in (None, p) and vial in (None, v) and scan in (None, q)
        return per_year / 365.25 * np.clip(days - from_day, 0.0, None) if chosen else np.zeros_like(days)

    return shift
