"""The page that compares scanners: bias, repeatability, reproducibility, pairs, and who left the others."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qa.report.rounding import NONE, fixed, interval, significant, with_u

if TYPE_CHECKING:
    from qa.compare import Agreement
    from qa.compare.agreement import Comparison, Departure, Level, Pair, ScannerRow


def content(found: Agreement) -> dict[str, Any]:
    """What the page shows."""
    span = f"{found.first} to {found.last}" if found.first and found.last else "no runs"
    return {
        "span": span,
        "counted": found.runs,
        "compared": list(found.scanners),
        "departures": [_departure(one) for one in found.departures],
        "returned": [_departure(one) for one in found.returned],
        "remarks": list(found.remarks),
        "comparisons": [_comparison(one) for one in found.comparisons],
    }


def _departure(one: Departure) -> dict[str, Any]:
    return {"scanner": one.scanner, "sentence": one.sentence, "reasons": list(one.reasons)}


def _comparison(one: Comparison) -> dict[str, Any]:
    change, parts = one.smallest_change, one.variances
    return {
        "title": f"{one.quantity}: {one.scan}",
        "remarks": list(one.remarks),
        "scanners": [_scanner(row) for row in one.scanners],
        "change": [
            ("two runs of one scanner", _percent(change.single_scanner_percent, change.single_scanner_interval)),
            ("any two scanners", _percent(change.any_two_percent, change.any_two_interval)),
        ],
        "change_missing": list(change.not_given.values()),
        "parts": [
            ("repeatability s_r (one scanner, run to run)", _percent(parts.s_r_percent, parts.s_r_interval)),
            ("reproducibility s_R (any scanners)", _percent(parts.s_R_percent, parts.s_R_interval)),
            ("between scanners", _percent(parts.between_cv_percent, parts.between_cv_interval)),
            ("of it common to all vials", _percent(parts.scanner_percent, None)),
            ("of it different from vial to vial", _percent(parts.scanner_vial_percent, None)),
            ("between runs, common to all vials", _percent(parts.run_percent, None)),
            ("common to all scanners (the references)", _percent(parts.vial_percent, None)),
            ("the rest: one vial in one run", _percent(parts.rest_percent, None)),
        ],
        "parts_missing": list(dict.fromkeys(parts.not_given.values())),
        "pairs": [_pair(row) for row in one.pairs],
        "levels": [_level(row) for row in one.levels],
    }


def _percent(value: float | None, bounds: tuple[float, float] | None) -> str:
    if value is None:
        return NONE
    if bounds is None:
        return f"{significant(value, 2)} % (no interval is given for this part)"
    return f"{significant(value, 2)} % (95 %: {interval(bounds[0], bounds[1], '%')})"


def _scanner(row: ScannerRow) -> dict[str, Any]:
    slope = row.slope_interval
    return {
        "name": row.scanner,
        "phantoms": ", ".join(row.phantoms),
        "runs": row.runs,
        "vials": row.vials,
        "span": f"{row.first} to {row.last}",
        "bias": with_u(row.bias_percent, row.u_bias_percent, "%", sign=True),
        "slope": f"{fixed(row.slope, 4)} ({interval(*slope)})" if slope else NONE,
        "cv": _percent(row.within_cv_percent, row.within_cv_interval),
        "missing": "; ".join(dict.fromkeys(row.not_given.values())),
    }


def _pair(row: Pair) -> dict[str, Any]:
    agreed = NONE
    if row.lower_limit_percent is not None and row.upper_limit_percent is not None:
        agreed = interval(row.lower_limit_percent, row.upper_limit_percent, "%", sign=True)
    bias = NONE
    if row.bias_percent is not None and row.bias_interval is not None:
        low, high = row.bias_interval
        bias = f"{significant(row.bias_percent, 2, sign=True)} % (95 %: {interval(low, high, '%', sign=True)})"
    return {
        "names": f"{row.first} − {row.second}",
        "vials": row.vials,
        "bias": bias,
        "limits": agreed,
        "concordance": fixed(row.concordance, 5),
        "missing": "; ".join(dict.fromkeys(row.not_given.values())),
    }


def _level(row: Level) -> dict[str, Any]:
    return {
        "vial": row.vial,
        "phantom": row.phantom,
        "against": row.against,
        "nominal": f"{significant(row.nominal_ms, 4)} ms",
        "s_r": _percent(row.s_r_percent, row.s_r_interval),
        "s_R": _percent(row.s_R_percent, row.s_R_interval),
        "scanners": [
            {
                "name": one.scanner,
                "mean": with_u(one.mean_percent, one.u_percent, "%", sign=True),
                "h": fixed(one.h, 2, sign=True) + (f" beyond {one.h_flag}" if one.h_flag else ""),
                "k": fixed(one.k, 2) + (f" beyond {one.k_flag}" if one.k_flag else ""),
                "runs": one.runs,
            }
            for one in row.scanners
        ],
        "missing": "; ".join(dict.fromkeys(row.not_given.values())),
    }
