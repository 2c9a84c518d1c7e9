"""The rows about levels, scanners and pairs of one scan."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import UTC, date, datetime
from itertools import combinations

import numpy as np

from qa.compare.agreement import Flag, Level, LevelScanner, Pair, ScannerRow
from qa.compare.intervals import combined_freedom, mean_interval, spread_interval
from qa.compare.linearity import FEWEST_VIALS, line
from qa.compare.pairs import Repeats, concordance, limits_of_agreement
from qa.compare.precision import mandel, precision
from qa.compare.slabs import Scatter, Slab, scatter
from qa.trend.streams import natural
from qa.words import Floats

ONE_SCANNER = "only one scanner measured it"
NO_REPEAT = "no scanner measured it twice"
ONE_RUN = "this scanner has no two runs of the same vial"
NO_REFERENCE = "its vials have no reference value at this scanner's field"


def day_of(days: float) -> date:
    """The UTC date of a time in days since the epoch."""
    return datetime.fromtimestamp(days * 86400.0, tz=UTC).date()


def levels(made: Sequence[Slab]) -> tuple[Level, ...]:
    """One row per vial and phantom, with every scanner that has a reading of it."""
    keys = {key for slab in made for key in slab.keys}
    rows = [_level(key, made) for key in sorted(keys, key=lambda key: (key[0], natural(key[1])))]
    return tuple(row for row in rows if row is not None)


def _level(key: tuple[str, str], made: Sequence[Slab]) -> Level | None:
    having: list[tuple[Slab, int, Floats]] = []
    for slab in made:
        if key in slab.keys:
            column = slab.keys.index(key)
            values = slab.percent[:, column]
            values = values[np.isfinite(values)]
            if values.size:
                having.append((slab, column, values))
    if not having:
        return None
    groups = [values for _, _, values in having]
    found, flags = precision(groups), mandel(groups)
    not_given = {}
    if not np.isfinite(found.s_r):
        not_given["s_r_percent"] = NO_REPEAT
    if not np.isfinite(found.s_R):
        not_given["s_R_percent"] = NO_REPEAT if found.groups > 1 else ONE_SCANNER
    if not np.isfinite(flags.h_critical_5):
        not_given["h"] = "Mandel's statistics need three scanners"
    few = found.groups < 3
    cells = []
    for place, (slab, column, values) in enumerate(having):
        s = float(np.std(values, ddof=1)) if values.size > 1 else None
        u = s / float(np.sqrt(values.size)) if s is not None else _stated(slab.u[:, column])
        h = None if few else _number(flags.h[place])
        k = None if few else _number(flags.k[place])
        cells.append(
            LevelScanner(
                slab.scanner,
                int(values.size),
                float(values.mean()),
                u,
                s,
                h,
                _flag(abs(h) if h is not None else None, flags.h_critical_5, flags.h_critical_1),
                k,
                _flag(k, float(flags.k_critical_5[place]), float(flags.k_critical_1[place])),
                (float(flags.k_critical_5[place]), float(flags.k_critical_1[place])) if k is not None else None,
            )
        )
    return Level(
        key[0],
        key[1],
        "reference" if having[0][0].from_reference[having[0][1]] else "mean of the scanners",
        float(np.mean([np.nanmean(slab.value_ms[:, column]) for slab, column, _ in having])),
        float(np.mean([cell.mean_percent for cell in cells])),
        _number(found.s_r),
        found.s_r_interval(),
        _number(found.s_R),
        found.s_R_interval(),
        None if few else (flags.h_critical_5, flags.h_critical_1),
        tuple(cells),
        not_given,
    )


def _stated(u: Floats) -> float | None:
    """Median stated uncertainty, where a scanner has read a vial only once."""
    known = u[np.isfinite(u)]
    return float(np.median(known)) if known.size else None


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def _flag(value: float | None, at_5: float, at_1: float) -> Flag | None:
    if value is None or not np.isfinite(at_5):
        return None
    return "1 %" if value > at_1 else "5 %" if value > at_5 else None


def scanner_rows(made: Sequence[Slab]) -> tuple[ScannerRow, ...]:
    """One row per scanner, over all its phantoms."""
    names = sorted({slab.scanner for slab in made})
    rows = [_scanner(name, [slab for slab in made if slab.scanner == name]) for name in names]
    return tuple(row for row in rows if row is not None)


def _scanner(name: str, mine: Sequence[Slab]) -> ScannerRow | None:
    mine = [slab for slab in mine if slab.whole.size]
    if not mine:
        return None
    not_given: dict[str, str] = {}
    whole = np.concatenate([slab.whole for slab in mine])
    spreads = [scatter(slab.percent) for slab in mine]
    bias, u_bias, freedom = _bias(mine, spreads)
    if bias is None:
        not_given["bias_percent"] = NO_REFERENCE
    elif u_bias is None:
        not_given["bias_interval"] = ONE_RUN
    vials = sum(int(np.isfinite(slab.percent).any(axis=0).sum()) for slab in mine)
    found = line(*_stacked(mine))
    if found is None:
        not_given["slope"] = f"fewer than {FEWEST_VIALS} vials have a reference value at this scanner's field"
    elif found.slope_interval is None:
        not_given["slope_interval"] = ONE_RUN
    kept = [one for one in spreads if one is not None]
    cv = interval = None
    if kept:
        weight = np.array([one.freedom for one in kept])
        cv = float(np.sqrt(np.average([one.total for one in kept], weights=weight)))
        interval = spread_interval(cv, float(weight.sum()))
    else:
        not_given["within_cv_percent"] = ONE_RUN
    return ScannerRow(
        name,
        tuple(sorted({slab.phantom for slab in mine})),
        len(whole),
        vials,
        day_of(float(whole.min())),
        day_of(float(whole.max())),
        bias,
        u_bias,
        mean_interval(bias, u_bias, freedom) if bias is not None and u_bias is not None else None,
        found.slope if found else None,
        found.slope_interval if found else None,
        found.intercept_ms if found else None,
        found.intercept_interval_ms if found else None,
        cv,
        interval,
        not_given,
    )


def _bias(mine: Sequence[Slab], spreads: Sequence[Scatter | None]) -> tuple[float | None, float | None, float]:
    """Mean deviation from the references, its standard uncertainty (runs and references) and degrees of freedom."""
    means, u_reference, parts, known = [], [], [], True
    for slab, spread in zip(mine, spreads, strict=True):
        here = slab.from_reference & np.isfinite(slab.means)
        means += list(slab.means[here])
        u_reference += list(np.nan_to_num(100.0 * slab.u_reference_ms[here] / slab.reference_ms[here]))
        if here.any():
            known = known and spread is not None
            if spread is not None:
                parts.append((int(here.sum()), spread))
    if not means:
        return None, None, 0.0
    bias, count = float(np.mean(means)), len(means)
    if not known:
        return bias, None, 0.0
    variances = [((vials / count) ** 2 * spread.run / spread.runs, spread.runs - 1.0) for vials, spread in parts]
    variances.append((float(np.sum(np.square(u_reference))) / count**2, float("inf")))
    total = sum(part for part, _ in variances)
    return bias, float(np.sqrt(total)), combined_freedom(variances)


def _stacked(mine: Sequence[Slab]) -> tuple[Floats, Floats, Floats]:
    """Values (runs, vials) at the latest references, those references, and their uncertainties, over all phantoms."""
    rows = sum(len(slab.percent) for slab in mine)
    columns = sum(len(slab.labels) for slab in mine)
    value = np.full((rows, columns), np.nan)
    row = column = 0
    for slab in mine:
        block = slab.reference_ms * (1.0 + np.where(slab.from_reference, slab.percent, np.nan) / 100.0)
        value[row : row + len(slab.percent), column : column + len(slab.labels)] = block
        row, column = row + len(slab.percent), column + len(slab.labels)
    reference = np.concatenate([slab.reference_ms for slab in mine])
    return value, reference, np.concatenate([slab.u_reference_ms for slab in mine])


def pairs(made: Sequence[Slab]) -> tuple[Pair, ...]:
    """Every two scanners, on the phantoms and vials that both measured."""
    names = sorted({slab.scanner for slab in made if slab.whole.size})
    return tuple(_pair(a, b, made) for a, b in combinations(names, 2))


def _pair(a: str, b: str, made: Sequence[Slab]) -> Pair:
    first = {slab.phantom: slab for slab in made if slab.scanner == a}
    second = {slab.phantom: slab for slab in made if slab.scanner == b}
    shared = sorted(first.keys() & second.keys())
    x_percent: list[float] = []
    y_percent: list[float] = []
    nominal: list[float] = []
    sides: tuple[list[Floats], list[Floats]] = ([], [])
    phantoms = []
    for phantom in shared:
        one, two = first[phantom], second[phantom]
        labels = [v for v in one.labels if v in two.labels]
        i = np.array([one.labels.index(v) for v in labels], dtype=np.intp)
        j = np.array([two.labels.index(v) for v in labels], dtype=np.intp)
        both = np.isfinite(one.means[i]) & np.isfinite(two.means[j])
        if not both.any():
            continue
        phantoms.append(phantom)
        i, j = i[both], j[both]
        x_percent += list(one.means[i])
        y_percent += list(two.means[j])
        middle = 0.5 * (one.reference_ms[i] + two.reference_ms[j])
        measured = 0.5 * (np.nanmean(one.value_ms[:, i], axis=0) + np.nanmean(two.value_ms[:, j], axis=0))
        nominal += list(np.where(one.from_reference[i] & two.from_reference[j], middle, measured))
        sides[0].append(one.percent[:, i])
        sides[1].append(two.percent[:, j])
    not_given: dict[str, str] = {}
    if not x_percent:
        reason = "they share no vial of one phantom"
        return _empty_pair(a, b, dict.fromkeys(("bias_percent", "lower_limit_percent", "concordance"), reason))
    x, y, scale = np.array(x_percent), np.array(y_percent), np.array(nominal)
    repeats = [_repeats(side) for side in sides]
    if any(one is None for one in repeats):
        not_given["lower_limit_percent"] = "one of them has no two runs of the same vial"
    limits = limits_of_agreement(x - y, *repeats)
    if x.size < 2:
        not_given["bias_interval"] = not_given["lower_limit_percent"] = "they share only one vial"
    agreed = concordance(scale * (1.0 + x / 100.0), scale * (1.0 + y / 100.0))
    if agreed is None:
        not_given["concordance"] = "fewer than three vials are shared"
    whole = "lower_limit_percent" not in not_given
    return Pair(
        a,
        b,
        tuple(phantoms),
        int(x.size),
        limits.bias,
        limits.bias_interval,
        limits.lower if whole else None,
        limits.upper if whole else None,
        limits.lower_interval if whole else None,
        limits.upper_interval if whole else None,
        agreed[0] if agreed else None,
        agreed[1] if agreed else None,
        not_given,
    )


def _empty_pair(a: str, b: str, not_given: dict[str, str]) -> Pair:
    return Pair(a, b, (), 0, None, None, None, None, None, None, None, None, not_given)


def _repeats(side: Sequence[Floats]) -> Repeats | None:
    """How single readings scatter on one side of a pair, over all shared phantoms."""
    found = [(one, scatter(one)) for one in side]
    kept = [(one, spread) for one, spread in found if spread is not None]
    if len(kept) < len(found):
        return None
    weight = np.array([spread.freedom for _, spread in kept])
    counts = np.concatenate([np.isfinite(one).sum(axis=0) for one, _ in kept])
    common = sum((one.shape[1] / counts.size) ** 2 * spread.shared / spread.runs for one, spread in kept)
    return Repeats(
        float(np.average([spread.total for _, spread in kept], weights=weight)),
        float(weight.sum()),
        float(np.mean(1.0 / counts)),
        float(np.sqrt(common)),
    )
