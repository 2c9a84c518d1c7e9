"""From numbers to states: a table of small checks, each with one sentence, and the Estimate they lead to."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np

from qa.errors import TimingError
from qa.fit.estimate import Estimate, Signals
from qa.words import Floats, Quantity, State

MOST_RELATIVE_U = 0.12  # a reading less certain than this (k = 1, noise) is not determined
SHARED_FREEDOM = 20.0
ROWS_FOR_MEDIAN = 5  # fewer rows do not tell what is common to all
FLOOR_OVER_NOISE = 3.0  # an averaged signal must reach this many voxel noises to be above the floor


@dataclass(frozen=True, slots=True, eq=False)
class Facts:
    """What the checks look at; n rows."""

    signals: Signals
    quantity: Quantity
    value_ms: Floats  # (n,)
    u_ms: Floats  # (n,)
    u_model_ms: Floats  # (n,)
    reduced_chi2: Floats  # (n,)
    converged: np.ndarray  # (n,) bool
    low_ms: float  # values outside low..high lie at the end of the search
    high_ms: float
    traits: Mapping[str, Floats] = field(default_factory=dict)  # of one method: (n,) each


@dataclass(frozen=True, slots=True)
class Check:
    """One check: `found` marks rows (n,), `say` gives the sentence for one row."""

    code: str
    state: State  # what a marked row becomes
    found: Callable[[Facts], np.ndarray]
    say: Callable[[Facts, int], str]


def _times(facts: Facts) -> str:
    return "TI" if facts.quantity is Quantity.T1 else "TE"


COMMON: tuple[Check, ...] = (
    Check(
        "not-finite",
        State.VOID,
        lambda f: np.asarray(~np.isfinite(f.signals.values).all(axis=1)),
        lambda f, i: "the signal has values that are not finite numbers",
    ),
    Check(
        "noise-floor",
        State.NOT_DETERMINED,
        lambda f: f.traits["peak"] < FLOOR_OVER_NOISE * np.nan_to_num(f.signals.noise),
        lambda f, i: (
            f"the largest signal is {f.traits['peak'][i] / f.signals.noise:.1f} times the noise of a voxel: "
            "at the noise floor"
        ),
    ),
    Check(
        "no-convergence",
        State.NOT_DETERMINED,
        lambda f: ~f.converged,
        lambda f, i: "the fit did not converge",
    ),
    Check(
        "out-of-range",
        State.NOT_DETERMINED,
        lambda f: ~((f.value_ms > f.low_ms) & (f.value_ms < f.high_ms)),
        lambda f, i: (
            f"{f.quantity} lies outside what these {_times(f)} ({f.signals.times_ms[0]:g} to "
            f"{f.signals.times_ms[-1]:g} ms) can determine ({f.low_ms:.3g} to {f.high_ms:.3g} ms)"
        ),
    ),
    Check(
        "uncertain",
        State.NOT_DETERMINED,
        lambda f: ~(np.hypot(f.u_ms, f.u_model_ms) <= MOST_RELATIVE_U * f.value_ms),
        lambda f, i: (
            f"these {_times(f)} and this noise leave {f.quantity} open: near {f.value_ms[i]:.3g} ms with a standard "
            f"uncertainty of {100 * np.hypot(f.u_ms[i], f.u_model_ms[i]) / f.value_ms[i]:.0f} %"
            if np.isfinite(f.u_ms[i])
            else f"these {_times(f)} do not determine {f.quantity}: its uncertainty has no bound"
        ),
    ),
    Check(
        "misfit",
        State.MARKED,
        lambda f: (f.reduced_chi2 > 4.0) & (f.traits["misfit"] > 0.02),
        lambda f, i: (
            f"the residuals are {np.sqrt(f.reduced_chi2[i]):.1f} times the noise and {100 * f.traits['misfit'][i]:.1f} "
            "% of the largest signal: the curve does not follow the model"
        ),
    ),
)


ECHO_CHECKS: tuple[Check, ...] = (
    Check(
        "few-echoes",
        State.NOT_DETERMINED,
        lambda f: f.traits["above"] < 3,
        lambda f, i: f"only {int(f.traits['above'][i])} echoes lie above the noise floor",
    ),
)


def usable(signals: Signals) -> Floats:
    """Values with rows that are not finite set to zero, so that one bad row stops no other; magnitudes positive."""
    values = np.array(signals.values, float)
    values[~np.isfinite(values).all(axis=1)] = 0.0
    return values if signals.signed else np.abs(values)


def check_signals(signals: Signals, least: int) -> None:
    """Refuse times and shapes that no fit can use (`TimingError`)."""
    times, values = np.asarray(signals.times_ms, float), signals.values
    if values.ndim != 2 or times.ndim != 1 or values.shape[1] != times.size:
        raise TimingError(f"signals of shape {values.shape} do not belong to {times.size} times")
    if times.size < least:
        raise TimingError(f"{times.size} samples, and this method needs at least {least}", remedy="add TIs or echoes")
    if not np.isfinite(times).all() or (times < 0).any():
        raise TimingError("times must be finite and not negative", remedy="check the TI or TE in the files")
    if (np.diff(times) < 0).any():
        raise TimingError("times must not decrease", remedy="sort the frames by time")
    if len(np.unique(times)) < least:
        raise TimingError(f"{len(np.unique(times))} different times, and this method needs at least {least}")


def mean_sd(signals: Signals) -> Floats:
    """Standard deviation of a row's samples far from the floor, (n, 1); NaN noise counts as 0."""
    return np.asarray(np.nan_to_num(signals.noise) / np.sqrt(np.maximum(signals.voxels, 1.0)))[:, None]


def residual_scale(reduced_chi2: Floats, freedom: float) -> Floats:
    """Factor (n,) on u for residuals that are larger than the noise of one voxel explains.

    Neighbouring voxels share noise where images were filtered or interpolated, and their averages are noisier then
    than their number suggests. All rows of a run show that nearly alike, so a row's variance is drawn towards their
    median, as if that were known with SHARED_FREEDOM degrees of freedom; never below what is expected. A row whose
    own residuals exceed even the median (95 % of cases do not) gets its own factor.

    Quantiles of chi2 / freedom are Wilson and Hilferty's (Proc Natl Acad Sci 17 (1931) 684-688); drawing variances
    together: Smyth G K, Stat Appl Genet Mol Biol 3 (2004) 3.
    """
    if freedom < 1:
        return np.ones_like(reduced_chi2)
    spread = 2.0 / (9.0 * freedom)
    median, limit = (1.0 - spread) ** 3, (1.0 - spread + 1.645 * np.sqrt(spread)) ** 3
    known = reduced_chi2[np.isfinite(reduced_chi2)]
    common = max(1.0, float(np.median(known)) / median) if len(known) >= ROWS_FOR_MEDIAN else 1.0
    drawn = (SHARED_FREEDOM * common + freedom * reduced_chi2) / (SHARED_FREEDOM + freedom)
    return np.sqrt(np.where(reduced_chi2 > limit * common, np.maximum(reduced_chi2, 0.0), np.maximum(drawn, 1.0)))


def conclude(
    facts: Facts,
    checks: tuple[Check, ...],
    *,
    names: tuple[str, ...],
    parameters: Floats,
    covariance: Floats,
    fitted: Floats,
    shared: Mapping[str, float] | None = None,
) -> Estimate:
    """Put every row through the checks, in order, and build the Estimate: rows without a number get NaN."""
    n = len(facts.value_ms)
    states = np.full(n, 0)  # 0 good, 1 marked, 2 not determined, 3 void
    notes: list[list[str]] = [[] for _ in range(n)]
    rank = {State.GOOD: 0, State.MARKED: 1, State.NOT_DETERMINED: 2, State.VOID: 3}
    with np.errstate(all="ignore"):
        for check in checks:
            for i in np.flatnonzero(check.found(facts) & (states < 2)):
                states[i] = max(states[i], rank[check.state])
                notes[i].append(check.say(facts, int(i)))
    blank = states >= 2
    by_rank = list(rank)
    return Estimate(
        quantity=facts.quantity,
        value_ms=np.where(blank, np.nan, facts.value_ms),
        u_ms=np.where(blank, np.nan, facts.u_ms),
        u_model_ms=np.where(blank, np.nan, facts.u_model_ms),
        names=names,
        parameters=parameters,
        covariance=covariance,
        fitted=fitted,
        residual=facts.signals.values - fitted,
        reduced_chi2=facts.reduced_chi2,
        states=tuple(by_rank[s] for s in states),
        notes=tuple(tuple(row) for row in notes),
        shared=dict(shared or {}),
    )
