"""Variance components by restricted maximum likelihood: scanner, vial, scanner x vial, run within scanner, rest.

The model of one reading, in percent, is ``mean + scanner + vial + scanner.vial + run(scanner) + rest``, all random.
Runs are many and independent given their scanner, so they are absorbed in closed form, runs with the same vials
together; then each scanner by itself; what is left is a small dense system, the mean and the vials.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.words import Floats, Ints

_MOST = 1e6  # no part is taken for more than so many times the rest


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
class _Block:
    """Sufficient statistics of one scanner; its vials are its cells (c), its kinds of run patterns (p)."""

    vial: Ints  # (c,)
    count: Floats  # (c,) readings
    total: Floats  # (c,) sum of readings
    square: float  # sum of squared readings
    pattern: Floats  # (p, c) readings of each cell in a run of this kind
    size: Floats  # (p,) readings in such a run
    runs: Floats  # (p,) runs of this kind
    run_total: Floats  # (p,) sum over those runs of the run's sum
    run_square: Floats  # (p,) sum over those runs of the run's sum squared


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
    y = np.asarray(values, dtype=np.float64) - centre
    blocks = [_summed(y[here], codes[1][here], codes[2][here]) for here in _each(codes[0])]
    scanners, vials, runs = (int(code.max(initial=-1)) + 1 for code in codes)
    told = _told_apart(blocks, scanners, vials, runs, len(y))
    if told is None:
        return None
    profile = _Profile(blocks, told, vials, len(y))
    nothing = float(y @ y) <= 1e-18 * len(y)
    relative = np.zeros(len(told)) if nothing else _lowest(profile)
    at = profile(relative)
    part: dict[str, float] = dict(zip(told, (relative * at.rest).tolist(), strict=True))
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
        readings=len(y),
    )


def _each(code: Ints) -> list[Ints]:
    """Where each code stands."""
    order = np.argsort(code, kind="stable")
    return np.split(order, np.cumsum(np.bincount(code))[:-1]) if code.size else []


def _summed(y: Floats, vial: Ints, run: Ints) -> _Block:
    vials, cell = np.unique(vial, return_inverse=True)
    runs, row = np.unique(run, return_inverse=True)
    in_run = np.zeros((runs.size, vials.size))
    np.add.at(in_run, (row, cell), 1.0)
    run_sum = _totals(row, y)
    pattern, kind = np.unique(in_run, axis=0, return_inverse=True)
    kind = kind.ravel()
    return _Block(
        vials,
        _totals(cell),
        _totals(cell, y),
        float(y @ y),
        pattern,
        pattern.sum(axis=1),
        _totals(kind),
        _totals(kind, run_sum),
        _totals(kind, run_sum**2),
    )


def _totals(code: Ints, values: Floats | None = None) -> Floats:
    """Sum of the values of each code; without values, how many there are."""
    return np.asarray(np.bincount(code, values), dtype=np.float64)


def _told_apart(blocks: list[_Block], scanners: int, vials: int, runs: int, readings: int) -> tuple[str, ...] | None:
    """Which parts these readings can tell from the others; None if not even the rest can be."""
    cells = sum(block.vial.size for block in blocks)
    run_of_many = any((block.size > 1).any() for block in blocks)
    several_runs = runs > scanners
    told = []
    if scanners > 1:
        told.append("scanner")
    if vials > 1:
        told.append("vial")
    repeated = readings > cells + (runs - scanners if several_runs and run_of_many else 0)
    if scanners > 1 and vials > 1 and cells > scanners + vials - 1 and repeated:
        told.append("scanner_vial")
    if several_runs and run_of_many and runs < readings:
        told.append("run")
    if "scanner_vial" not in told and readings <= scanners + vials - 1:
        return None
    return tuple(told)


@dataclass(frozen=True, slots=True, eq=False)
class _At:
    """The profile at one point: minus twice the likelihood, its gradient, the rest variance and the mean."""

    deviance: float
    gradient: Floats
    rest: float
    mean: float


@dataclass(slots=True, eq=False)
class _Absorbed:
    """One scanner with its runs and its own effects absorbed; (c, c), (c,) and so on, in units of the rest."""

    block: _Block
    kept: Floats  # (p,) 1 / (1 + run variance * readings in the run)
    shrink: Floats  # (c, c) covariance of the cells' own effects after seeing the readings
    inner: Floats  # (c, c)
    outer: Floats  # (c, c) inner less what the scanner's own effects take
    along: Floats  # (c,)
    left: Floats  # (c,) along less what they take
    square: float
    volume: float


class _Profile:
    """Minus twice the restricted likelihood of the variances relative to the rest, the rest profiled out."""

    def __init__(self, blocks: list[_Block], told: tuple[str, ...], vials: int, readings: int) -> None:
        self.blocks, self.told, self.parts, self.vials = blocks, told, len(told), vials
        self.freedom = readings - 1.0

    def __call__(self, relative: Floats) -> _At:
        """At `relative` variances, in the order of the parts told apart."""
        part = dict(zip(self.told, relative.tolist(), strict=True))
        absorbed = [_absorb(block, part) for block in self.blocks]
        root = float(np.sqrt(part.get("vial", 0.0)))
        width = 1 + self.vials
        system, right = np.zeros((width, width)), np.zeros(width)  # the mean, then the vials
        for one in absorbed:
            where = np.concatenate([[0], 1 + one.block.vial])
            design = _design(one.block, root)
            system[np.ix_(where, where)] += design.T @ one.outer @ design
            right[where] += design.T @ one.left
        system[np.arange(1, width), np.arange(1, width)] += 1.0
        lower = np.linalg.cholesky(system)
        solved = np.linalg.solve(lower, right)
        inverse = np.linalg.solve(lower.T, np.linalg.solve(lower, np.eye(width)))
        effects = inverse @ right
        rss = max(sum(one.square for one in absorbed) - float(solved @ solved), 1e-300)
        volume = sum(one.volume for one in absorbed) + 2.0 * float(np.log(np.diag(lower)).sum())
        gradient = self._gradient(absorbed, root, inverse, effects, rss)
        return _At(volume + self.freedom * float(np.log(rss)), gradient, rss / self.freedom, float(effects[0]))

    def _gradient(self, absorbed: list[_Absorbed], root: float, inverse: Floats, effects: Floats, rss: float) -> Floats:
        trace, pull = dict.fromkeys(self.told, 0.0), dict.fromkeys(self.told, 0.0)
        of_vial = np.zeros(self.vials)
        vial_by_effect = np.zeros((self.vials, 1 + self.vials))
        for one in absorbed:
            where = np.concatenate([[0], 1 + one.block.vial])
            design, mine = _design(one.block, root), inverse[np.ix_(where, where)]
            through = one.outer @ design
            apart = one.left - through @ effects[where]
            if "scanner" in trace:
                of_one = through.sum(axis=0)
                trace["scanner"] += float(one.outer.sum() - of_one @ mine @ of_one)
                pull["scanner"] += float(apart.sum()) ** 2
            if "scanner_vial" in trace:
                trace["scanner_vial"] += float(np.trace(one.outer) - np.sum((through @ mine) * through))
                pull["scanner_vial"] += float(apart @ apart)
            if "vial" in trace:
                trace["vial"] += float(np.trace(one.outer))
                of_vial[one.block.vial] += apart
                vial_by_effect[np.ix_(one.block.vial, where)] += through
            if "run" in trace:
                block, kept = one.block, one.kept
                fixed = design - one.shrink @ (one.inner @ design)
                fitted = design @ effects[where]
                fitted = fitted + one.shrink @ (one.along - one.inner @ fitted)
                of_fit = block.pattern @ fitted
                spread = one.shrink + fixed @ mine @ fixed.T
                reach = np.sum((block.pattern @ spread) * block.pattern, axis=1)
                trace["run"] += float(block.runs @ (block.size * kept - kept**2 * reach))
                squares = block.run_square - 2.0 * of_fit * block.run_total + block.runs * of_fit**2
                pull["run"] += float(kept**2 @ squares)
        if "vial" in trace:
            trace["vial"] -= float(np.sum((vial_by_effect @ inverse) * vial_by_effect))
            pull["vial"] = float(of_vial @ of_vial)
        return np.array([trace[name] - self.freedom / rss * pull[name] for name in self.told])


def _design(block: _Block, root: float) -> Floats:
    """(c, 1 + c): the mean and the scanner's vials, these in units of their standard deviation."""
    return np.concatenate([np.ones((block.vial.size, 1)), root * np.eye(block.vial.size)], axis=1)


def _absorb(block: _Block, part: dict[str, float]) -> _Absorbed:
    of_run, cells = part.get("run", 0.0), block.vial.size
    kept = 1.0 / (1.0 + of_run * block.size)
    taken = of_run * kept
    inner = np.diag(block.count) - (block.pattern.T * (block.runs * taken)) @ block.pattern
    along = block.total - block.pattern.T @ (taken * block.run_total)
    own = part.get("scanner", 0.0) + part.get("scanner_vial", 0.0) * np.eye(cells)
    mixed = np.eye(cells) + own @ inner
    shrink: Floats = np.asarray(np.linalg.solve(mixed, own), dtype=np.float64)
    outer = np.linalg.solve(mixed.T, inner).T  # inner less inner @ shrink @ inner, without cancellation
    left: Floats = np.asarray(np.linalg.solve(mixed.T, along), dtype=np.float64)
    square = block.square - float(taken @ block.run_square) - float(along @ shrink @ along)
    volume = float(np.linalg.slogdet(mixed)[1]) - float(block.runs @ np.log(kept))
    return _Absorbed(block, kept, shrink, inner, 0.5 * (outer + outer.T), along, left, square, volume)


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
