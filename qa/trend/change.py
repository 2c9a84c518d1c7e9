"""Has a series changed, when, by a step or a slope, and by how much.

All candidates for the onset are tried at once by least squares with one intercept per group (a group is a stretch
with a baseline of its own, so scanners and restarts can be pooled). The scale of the scatter is estimated from the
series itself; only relative uncertainties are taken from the caller.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.special import stdtrit

from qa.trend.streams import Bools, Ints
from qa.words import Floats

Kind = Literal["step", "slope"]
KINDS: tuple[Kind, ...] = ("step", "slope")
YEAR = 365.25
FEWEST_AFTER_STEP = 3
FEWEST_AFTER_SLOPE = 5
FEWEST_BEFORE = 3


@dataclass(frozen=True, slots=True, eq=False)
class Change:
    """One change. Times in days (the unit of the series' times), sizes in percent.

    Standard uncertainties contain that of the onset.
    """

    kind: Kind
    onset: float  # step: time of the first run after it; slope: where the line leaves the level
    earliest: float  # with `latest` the 90 % set; a step happened after `earliest` and not after `latest`
    latest: float
    size: float  # step: its height; slope: the change from the onset to the last run
    u_size: float
    rate: float  # percent per year; NaN for a step
    u_rate: float
    freedom: float
    chance: float  # probability that an unchanged series shows as much anywhere
    favour: float  # log likelihood of this kind over the other kind
    inflation: float  # of variances by autocorrelation of what is left; 1: none seen

    def at(self, t: Floats) -> Floats:
        """What the change adds to values at times `t` (days), percent."""
        if self.kind == "step":
            return np.asarray(self.size * (t >= self.onset), dtype=np.float64)
        return np.asarray(self.rate * np.clip(t - self.onset, 0.0, None) / YEAR, dtype=np.float64)

    def interval(self, level: float = 0.90) -> tuple[float, float]:
        """Interval of the size."""
        reach = float(stdtrit(self.freedom, 0.5 + level / 2.0)) * self.u_size
        return self.size - reach, self.size + reach

    def rate_interval(self, level: float = 0.90) -> tuple[float, float] | None:
        """Interval of the rate; None for a step."""
        if self.kind == "step":
            return None
        reach = float(stdtrit(self.freedom, 0.5 + level / 2.0)) * self.u_rate
        return self.rate - reach, self.rate + reach


def wild(values: Floats, sd: Floats) -> Bools:
    """Values far from the running median of five: single bad runs, not shifts. (n,) -> (n,).

    The scatter is the larger of what distances from that median and what successive differences say; in white noise
    one value in some thousands is flagged, whatever the length.
    """
    here = np.flatnonzero(np.isfinite(values))
    flags = np.zeros(values.shape, dtype=bool)
    if here.size < 5:
        return flags
    x = values[here]
    starts = np.clip(np.arange(x.size) - 2, 0, x.size - 5)
    middle = np.median(x[starts[:, None] + np.arange(5)], axis=1)
    distance = x - middle
    from_median = 1.15 * float(np.median(np.abs(distance)))
    from_differences = float(np.median(np.abs(np.diff(x)))) / np.sqrt(2.0)
    scale = 1.4826 * max(from_median, from_differences, 1e-9)
    flags[here] = np.abs(distance) > 4.0 * (1.0 + 4.0 / here.size) * np.maximum(scale, 0.7 * sd[here])
    return flags


def _regressor(kind: Kind, t: Floats, onset: Floats) -> Floats:
    """(n, m): what each candidate onset adds per unit of size (step) or per percent a year (slope)."""
    if kind == "step":
        return (t[:, None] >= onset).astype(np.float64)
    return np.clip(t[:, None] - onset, 0.0, None) / YEAR


def centred(x: Floats, weight: Floats, group: Ints) -> Floats:
    """Takes the weighted mean of each group out of every column."""
    out = np.empty_like(x)
    for number in np.unique(group):
        here = group == number
        out[here] = x[here] - (weight[here] @ x[here]) / weight[here].sum()
    return out


def peak_chance(z: float, count: int, edge: int) -> float:
    """Probability that the largest of the standardised candidates of an unchanged series exceeds `z` (two-sided).

    References
    ----------
    Miller and Siegmund (1982), Biometrics 38(4), 1011-1016 (maximally selected chi square).
    """
    if z < 1.2 or count <= 2 * edge:
        return 1.0
    low = edge / count
    span = 2.0 * np.log((1.0 - low) / low)
    density = np.exp(-0.5 * z * z) / np.sqrt(2.0 * np.pi)
    return float(min(1.0, density * ((z - 1.0 / z) * span + 4.0 / z)))


@dataclass(frozen=True, slots=True, eq=False)
class _Search:
    """All candidate onsets of one kind, (m,): fall of the weighted sum of squares, x'Wx, and estimate."""

    kind: Kind
    onset: Floats
    gain: Floats
    weight: Floats
    size: Floats


def _search(kind: Kind, t: Floats, y: Floats, weight: Floats, group: Ints) -> _Search | None:
    """Least squares at every onset at once: sums over the runs after it, from cumulative sums; `y` centred by group."""
    times = np.unique(t)
    after = FEWEST_AFTER_STEP if kind == "step" else FEWEST_AFTER_SLOPE
    if times.size < after:
        return None
    onset = times[FEWEST_BEFORE:] if kind == "step" else times
    onset = onset[onset <= times[-after]]
    if not onset.size:
        return None
    middle = 0.5 * float(times[0] + times[-1])
    years, on = (t - middle) / YEAR, (onset - middle) / YEAR
    power, along = np.zeros(onset.size), np.zeros(onset.size)
    for number in np.unique(group):
        here = np.flatnonzero(group == number)
        here = here[np.argsort(t[here], kind="stable")]
        first = np.searchsorted(t[here], onset, side="left")
        w, wy, whole = weight[here], weight[here] * y[here], float(weight[here].sum())
        s0, a0 = _after(w)[first], _after(wy)[first]
        if kind == "step":
            power += s0 - s0**2 / whole
            along += a0
        else:
            s1, s2 = _after(w * years[here])[first], _after(w * years[here] ** 2)[first]
            of_x = s1 - on * s0
            power += s2 - 2.0 * on * s1 + on**2 * s0 - of_x**2 / whole
            along += _after(wy * years[here])[first] - on * a0
    usable = power > 1e-10 * float(weight.sum())
    if not usable.any():
        return None
    onset, power, along = onset[usable], power[usable], along[usable]
    return _Search(kind, onset, along**2 / power, power, along / power)


def _after(values: Floats) -> Floats:
    """(n,) -> (n + 1,): sum of the values from each place to the end."""
    return np.concatenate([np.cumsum(values[::-1])[::-1], [0.0]])


def find_change(
    t: Floats,
    y: Floats,
    sd: Floats,
    group: Ints | None = None,
    *,
    kinds: tuple[Kind, ...] = KINDS,
    least_inflation: float = 1.0,
) -> Change | None:
    """The best single change of a series, however weak; its `chance` says whether to believe it.

    Parameters
    ----------
    t : (n,) float64, days, in any order
    y : (n,) float64, percent, finite
    sd : (n,) float64, relative standard uncertainties
    group : (n,) integers; each group has its own level before the change
    kinds : to choose from
    least_inflation : what is known otherwise of the inflation of variances by autocorrelation

    Returns
    -------
    None where there are too few runs (fewer than 7).
    """
    group = np.zeros(t.size, dtype=np.intp) if group is None else group
    weight = 1.0 / np.asarray(sd, dtype=np.float64) ** 2
    groups = np.unique(group).size
    freedom = float(t.size - groups - 2)
    if t.size < 7 or freedom < 3:
        return None
    y0 = centred(y[:, None], weight, group)[:, 0]
    rss0 = float(weight @ (y0 * y0))
    found = [s for s in (_search(kind, t, y0, weight, group) for kind in kinds) if s is not None]
    if not found or rss0 <= 0:
        return None
    best = max(found, key=lambda s: float(s.gain.max()))
    other = [s for s in found if s is not best]
    k = int(best.gain.argmax())
    rss = max(rss0 - float(best.gain[k]), 1e-12 * rss0)
    scale = rss / freedom

    x = _regressor(best.kind, t, best.onset[[k]])
    fitted = centred(x, weight, group)[:, 0] * best.size[k]
    inflation = max(_inflation(t, (y0 - fitted) * np.sqrt(weight), group), least_inflation)
    z = float(np.sqrt(freedom * np.log1p(best.gain[k] / scale / inflation / freedom)))
    chance = peak_chance(z, np.unique(t).size, FEWEST_BEFORE)

    power = (freedom + 1.0) / (2.0 * inflation)
    log_likelihood = -power * np.log(np.maximum(rss0 - best.gain, 1e-12 * rss0))
    favour = float("inf")
    if other:
        favour = float(log_likelihood[k] + power * np.log(max(rss0 - float(other[0].gain.max()), 1e-12 * rss0)))
    mass = _onset_mass(best, log_likelihood, t)
    earliest, latest = _onset_set(best, mass, t)
    variance = scale * inflation / best.weight
    span = np.ones(best.onset.size) if best.kind == "step" else (t.max() - best.onset) / YEAR
    size = best.size * span
    slope = best.kind == "slope"
    return Change(
        best.kind,
        float(best.onset[k]),
        earliest,
        latest,
        float(size[k]),
        _with_onset(size, variance * span**2, mass, k),
        float(best.size[k]) if slope else float("nan"),
        _with_onset(best.size, variance, mass, k) if slope else float("nan"),
        freedom,
        chance,
        favour,
        inflation,
    )


def _inflation(t: Floats, white: Floats, group: Ints) -> float:
    """How much autocorrelation widens variances: (1 + rho) / (1 - rho), where rho is plainly above zero."""
    products, squares = 0.0, float(white @ white)
    for number in np.unique(group):
        ordered = white[group == number][np.argsort(t[group == number], kind="stable")]
        products += float(ordered[1:] @ ordered[:-1])
    rho = products / squares if squares > 0 else 0.0
    rho = min(rho, 0.8) if rho > 1.65 / np.sqrt(white.size) else 0.0
    return (1.0 + rho) / (1.0 - rho)


def inflation_of_differences(t: Floats, white: Floats, group: Ints) -> float:
    """The same from differences of neighbours and second neighbours, which hardly see a change of level.

    Their mean squares, each difference cut at 2.5 sigmas, stand as 1 to 1 + rho; the estimate has an SD of about
    1.4 / sqrt(n) in white noise.
    """
    near, far = [], []
    for number in np.unique(group):
        ordered = white[group == number][np.argsort(t[group == number], kind="stable")]
        near.append(np.abs(np.diff(ordered)))
        far.append(np.abs(ordered[2:] - ordered[:-2]))
    first, second = np.concatenate(near), np.concatenate(far)
    if second.size < 3:
        return 1.0
    bound = 2.5 * 1.4826 * max(float(np.median(first)), float(np.median(second)))
    below = float(np.mean(np.minimum(first, bound) ** 2))
    rho = float(np.mean(np.minimum(second, bound) ** 2)) / below - 1.0 if below > 0 else 0.0
    rho = min(rho, 0.8) if rho > 1.4 / np.sqrt(white.size) else 0.0
    return (1.0 + rho) / (1.0 - rho)


def _onset_mass(search: _Search, log_likelihood: Floats, t: Floats) -> Floats:
    """(m,) how likely each candidate is the onset, spread evenly in time before looking; sums to 1."""
    times = np.unique(t)
    place = np.searchsorted(times, search.onset)
    gap = times[place] - times[np.maximum(place - 1, 0)]
    gap = np.where(gap > 0, gap, np.median(np.diff(times)))
    log_density = log_likelihood - 0.5 * np.log(search.weight)
    mass = gap * np.exp(log_density - log_density.max())
    return np.asarray(mass / mass.sum(), dtype=np.float64)


def _with_onset(size: Floats, variance: Floats, mass: Floats, k: int) -> float:
    """Standard uncertainty of the estimate at candidate k when the onset is only known by its likelihood."""
    return float(np.sqrt(mass @ (variance + (size - size[k]) ** 2)))


def _onset_set(search: _Search, mass: Floats, t: Floats) -> tuple[float, float]:
    """The smallest set of onsets that holds 90 % of the likelihood."""
    times = np.unique(t)
    order = np.argsort(-mass, kind="stable")
    kept = order[: int(np.searchsorted(np.cumsum(mass[order]), 0.90)) + 1]
    first, last = search.onset[kept].min(), search.onset[kept].max()
    if search.kind == "step":  # it happened after the run before the first candidate
        before = np.searchsorted(times, first) - 1
        first = times[max(before, 0)]
    return float(first), float(last)


def measure(
    change: Change,
    t: Floats,
    y: Floats,
    sd: Floats,
    group: Ints | None = None,
    *,
    along: Sequence[Change] = (),
) -> tuple[float, float]:
    """How much a series moved as `change` did elsewhere, and its standard uncertainty.

    Parameters
    ----------
    change : its kind and onset are taken, its size is measured: a step's height in percent, a slope's percent a year
    along : other changes that the series may have, too; theirs are fitted with it

    Returns
    -------
    NaN where the series cannot tell (no run before or after).
    """
    group = np.zeros(t.size, dtype=np.intp) if group is None else group
    if t.size < 4 + len(along):
        return float("nan"), float("nan")
    weight = 1.0 / sd**2
    root = np.sqrt(weight)[:, None]
    shapes = [_regressor(one.kind, t, np.array([one.onset]))[:, 0] for one in (change, *along)]
    columns = centred(np.column_stack([*shapes, y]), weight, group) * root
    if along:
        others = columns[:, 1:-1]
        factors, *_ = np.linalg.lstsq(others, columns[:, [0, -1]], rcond=1e-6)
        columns = columns[:, [0, -1]] - others @ factors
    x, rest = columns[:, 0], columns[:, -1]
    power = float(x @ x)
    if power <= 1e-9 * float(weight.sum()):
        return float("nan"), float("nan")
    size = float(x @ rest) / power
    left = rest - size * x
    scale = max(float(left @ left) / max(t.size - np.unique(group).size - 1 - len(along), 1), 0.25)
    return size, float(np.sqrt(scale / power))
