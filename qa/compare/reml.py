"""Variance components by restricted maximum likelihood: scanner, vial, scanner x vial, run within scanner, rest.

The model of one reading, in percent, is ``mean + scanner + vial + scanner.vial + run(scanner) + rest``, all random.
Runs are many and independent given their scanner, so they are absorbed in closed form, runs with the same vials
together; what is left is a small dense system.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.words import Floats, Ints

_MOST = 1e8  # no part is taken for more than so many times the rest


@dataclass(frozen=True, slots=True)
class Components:
    """Variances in the unit of the readings squared; None for a part that these readings cannot tell apart."""

    scanner: float | None
    vial: float | None
    scanner_vial: float | None
    run: float | None
    rest: float
    mean: float
    scanners: int
    vials: int
    runs: int
    readings: int


@dataclass(frozen=True, slots=True, eq=False)
class _Sums:
    """Sufficient statistics; cells are the scanner-vial pairs that occur (c), patterns the kinds of run (p)."""

    cell_scanner: Ints  # (c,)
    cell_vial: Ints  # (c,)
    count: Floats  # (c,) readings
    total: Floats  # (c,) sum of readings
    square: float  # sum of squared readings
    pattern: Floats  # (p, c) readings of each cell in a run of this kind
    runs: Floats  # (p,) runs of this kind
    run_total: Floats  # (p,) sum over those runs of the run's sum
    run_square: Floats  # (p,) sum over those runs of the run's sum squared

    @property
    def readings(self) -> float:
        """All readings."""
        return float(self.count.sum())


def reml(values: Floats, scanner: Ints, vial: Ints, run: Ints) -> Components | None:
    """Variance components of readings with any pattern of missing ones.

    Parameters
    ----------
    values : (n,) float64, finite
    scanner, vial, run : (n,) integer codes; a run belongs to one scanner

    Returns
    -------
    None where no part at all can be told apart (no repeated reading).

    References
    ----------
    Patterson and Thompson (1971), Biometrika 58, 545-554 (the likelihood); Bates, Maechler, Bolker and Walker
    (2015), Journal of Statistical Software 67(1) (the profiled form in relative variances).
    """
    codes = [np.unique(code, return_inverse=True)[1] for code in (scanner, vial, run)]
    centre = float(np.mean(values)) if len(values) else 0.0
    sums = _summed(np.asarray(values, dtype=np.float64) - centre, *codes)
    told = _told_apart(sums, codes)
    if told is None:
        return None
    profile = _Profile(sums, told)
    nothing = sums.square <= 1e-18 * sums.readings
    relative = np.zeros(len(told)) if nothing else _lowest(profile)
    at = profile(relative)
    part: dict[str, float] = dict(zip(told, (relative * at.rest).tolist(), strict=True))
    scanners, vials, runs = (int(code.max()) + 1 for code in codes)
    return Components(
        scanner=part.get("scanner"),
        vial=part.get("vial"),
        scanner_vial=part.get("scanner_vial"),
        run=part.get("run"),
        rest=at.rest,
        mean=at.mean + centre,
        scanners=scanners,
        vials=vials,
        runs=runs,
        readings=int(sums.readings),
    )


def _summed(y: Floats, scanner: Ints, vial: Ints, run: Ints) -> _Sums:
    pairs, cell = np.unique(np.stack([scanner, vial], axis=1), axis=0, return_inverse=True)
    cell = cell.ravel()
    in_run = np.zeros((run.max() + 1, len(pairs)))
    np.add.at(in_run, (run, cell), 1.0)
    run_sum = _totals(run, y)
    pattern, kind = np.unique(in_run, axis=0, return_inverse=True)
    kind = kind.ravel()
    return _Sums(
        pairs[:, 0],
        pairs[:, 1],
        _totals(cell),
        _totals(cell, y),
        float(y @ y),
        pattern,
        _totals(kind),
        _totals(kind, run_sum),
        _totals(kind, run_sum**2),
    )


def _totals(code: Ints, values: Floats | None = None) -> Floats:
    """Sum of the values of each code; without values, how many there are."""
    return np.asarray(np.bincount(code, values), dtype=np.float64)


def _told_apart(sums: _Sums, codes: list[Ints]) -> tuple[str, ...] | None:
    """Which parts these readings can tell from the others; None if not even the rest can be."""
    scanners, vials, runs = (int(code.max()) + 1 for code in codes)
    cells = len(sums.count)
    run_of_many = bool((sums.pattern.sum(axis=1) > 1).any())
    several_runs = runs > scanners
    told = []
    if scanners > 1:
        told.append("scanner")
    if vials > 1:
        told.append("vial")
    repeated = sums.readings > cells + (runs - scanners if several_runs and run_of_many else 0)
    if scanners > 1 and vials > 1 and cells > scanners + vials - 1 and repeated:
        told.append("scanner_vial")
    if several_runs and run_of_many and runs < sums.readings:
        told.append("run")
    if "scanner_vial" not in told and sums.readings <= scanners + vials - 1:
        return None
    return tuple(told) if repeated or "scanner_vial" not in told else None


@dataclass(frozen=True, slots=True, eq=False)
class _At:
    """The profile at one point: minus twice the likelihood, its gradient, the rest variance and the mean."""

    deviance: float
    gradient: Floats
    rest: float
    mean: float


class _Profile:
    """Minus twice the restricted likelihood of the variances relative to the rest, the rest profiled out."""

    def __init__(self, sums: _Sums, told: tuple[str, ...]) -> None:
        self.sums, self.with_run, self.parts = sums, "run" in told, len(told)
        own = {
            "scanner": np.eye(int(sums.cell_scanner.max()) + 1)[sums.cell_scanner],
            "vial": np.eye(int(sums.cell_vial.max()) + 1)[sums.cell_vial],
            "scanner_vial": np.eye(len(sums.count)),
        }
        self.designs = [own[name] for name in told if name != "run"]
        self.design = np.concatenate([np.ones((len(sums.count), 1)), *self.designs], axis=1)
        self.widths = [design.shape[1] for design in self.designs]
        self.size = sums.pattern.sum(axis=1)
        self.freedom = sums.readings - 1.0

    def __call__(self, relative: Floats) -> _At:
        """At `relative` variances, in the order of the parts told apart."""
        sums = self.sums
        of_run = float(relative[-1]) if self.with_run else 0.0
        kept = 1.0 / (1.0 + of_run * self.size)
        absorbed = of_run * kept
        inner = np.diag(sums.count) - (sums.pattern.T * (sums.runs * absorbed)) @ sums.pattern
        along = sums.total - sums.pattern.T @ (absorbed * sums.run_total)
        square = sums.square - float(absorbed @ sums.run_square)
        scale = np.concatenate([[1.0], np.repeat(np.sqrt(relative[: len(self.widths)]), self.widths)])
        x = self.design * scale
        system = x.T @ inner @ x
        system[np.diag_indices_from(system)] += np.concatenate([[0.0], np.ones(len(scale) - 1)])
        lower = np.linalg.cholesky(system)
        spread = np.linalg.solve(lower, x.T)  # x C^-1 x' = spread' spread
        right = spread @ along
        fitted = spread.T @ right  # of each cell
        rss = max(square - float(right @ right), 1e-300)
        volume = -float(sums.runs @ np.log(kept)) + 2.0 * float(np.log(np.diag(lower)).sum())

        through = spread @ inner
        projected = inner - through.T @ through
        left = along - inner @ fitted
        trace = [float(np.einsum("ci,cd,di->", d, projected, d)) for d in self.designs]
        pull = [float(((d.T @ left) ** 2).sum()) for d in self.designs]
        if self.with_run:
            of_fit = sums.pattern @ fitted
            reach = np.square(spread @ sums.pattern.T).sum(axis=0)
            trace.append(float(sums.runs @ (self.size * kept - kept**2 * reach)))
            pull.append(float(kept**2 @ (sums.run_square - 2.0 * of_fit * sums.run_total + sums.runs * of_fit**2)))
        gradient = np.array(trace) - self.freedom / rss * np.array(pull)
        mean = float(np.linalg.solve(lower.T, right)[0])
        return _At(volume + self.freedom * float(np.log(rss)), gradient, rss / self.freedom, mean)


def _lowest(profile: _Profile) -> Floats:
    """Relative variances of the highest likelihood, each at least 0."""
    from scipy.optimize import minimize

    best: Floats = np.ones(profile.parts)
    lowest = float("inf")
    for start in (1.0, 0.02):
        unit = np.full(profile.parts, start)
        for _ in range(4):  # again in units of the last answer, for the last digits

            def scaled(x: Floats, unit: Floats = unit) -> tuple[float, Floats]:
                at = profile(x * unit)
                return at.deviance, at.gradient * unit

            found = minimize(
                scaled,
                np.ones(profile.parts),
                jac=True,
                method="L-BFGS-B",
                bounds=[(0.0, _MOST / one) for one in unit],
                options={"ftol": 1e-15, "gtol": 1e-8, "maxiter": 200},
            )
            answer = found.x * unit
            if found.fun < lowest:
                best, lowest = answer, float(found.fun)
            if np.allclose(found.x, 1.0, rtol=1e-6):
                break
            unit = np.where(answer > 0, answer, unit * 1e-3)
    return best
