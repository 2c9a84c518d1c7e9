"""Batched variable projection: least squares of y = sum_k c_k phi_k(t; theta) for many rows at once.

The linear coefficients c are solved for exactly, so the search runs over theta only (one or two parameters here).
A coarse grid, one matrix product for all rows, finds the basin; damped Gauss-Newton steps of the projected problem
converge in it.

References
----------
.. [1] Golub G H and Pereyra V, SIAM J Numer Anal 10 (1973) 413-432 (variable projection).
.. [2] Kaufman L, BIT 15 (1975) 49-57 (the simplified Jacobian).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import product

import numpy as np

from qa.words import Floats

CHUNK_ROWS = 4000  # rows worked on together: their arrays stay in the cache

# theta (r, p) -> basis (r, m, k) and its derivatives (r, m, k, p); r is any number of rows
Basis = Callable[[Floats], tuple[Floats, Floats]]


@dataclass(frozen=True, slots=True, eq=False)
class Projected:
    """The outcome of a batched separable fit; n rows, m samples, k linear and p nonlinear parameters."""

    theta: Floats  # (n, p)
    coefficients: Floats  # (n, k)
    fitted: Floats  # (n, m)
    rss: Floats  # (n,), weighted by `weights` where given
    normal: Floats  # (n, p + k, p + k), weighted J'J in the order theta, coefficients
    converged: np.ndarray  # (n,) bool: the last step was below the tolerance

    def covariance(self, variance: Floats | float) -> Floats:
        """Covariance (n, p + k, p + k) for a noise `variance` per unit weight; NaN where the data determine nothing."""
        return np.asarray(inverse(self.normal) * np.reshape(variance, (-1, 1, 1)))


def log_grid(low: float, high: float, count: int) -> Floats:
    """Grid (count, 1), even in the logarithm."""
    return np.geomspace(low, high, count)[:, None]


def pair_grid(first: Floats, second: Floats) -> Floats:
    """Grid (pairs, 2) of two parameters of one kind (two rates): each unordered pair of different values once."""
    return np.array([(a, b) for a, b in product(first.ravel(), second.ravel()) if a < b])


def fit(
    values: Floats,
    basis: Basis,
    grid: Floats,
    *,
    weights: Floats | None = None,
    log_theta: bool = True,
    tolerance: float = 1e-11,
    most_steps: int = 60,
) -> Projected:
    """Fit all rows: grid, then refinement to convergence.

    Parameters
    ----------
    values : (n, m)
    basis : gives phi and d phi / d theta for any number of rows of theta
    grid : (g, p), values of theta to start from; with `log_theta`, positive
    weights : (n, m) or (m,), 1 / variance up to a factor; None: all 1. Row weights only act in the refinement
    log_theta : take steps in the logarithm of theta (rates and times)
    tolerance : relative step at which a row is done
    """
    values = np.atleast_2d(np.asarray(values, float))
    parts = []
    for first in range(0, max(len(values), 1), CHUNK_ROWS):
        rows = slice(first, first + CHUNK_ROWS)
        weight = None if weights is None else np.broadcast_to(weights, values.shape)[rows]
        start = grid[grid_search(values[rows], basis(grid)[0])]
        parts.append(
            refine(
                values[rows],
                basis,
                start,
                weights=weight,
                log_theta=log_theta,
                tolerance=tolerance,
                most_steps=most_steps,
            )
        )
    return parts[0] if len(parts) == 1 else _joined(parts)


def grid_search(values: Floats, phi: Floats) -> np.ndarray:
    """Index (n,) of the grid point with the least residual; `phi` (g, m, k) is the basis on the grid, all weights 1."""
    q = orthonormal(phi)
    g, _, k = q.shape
    explained = np.zeros((len(values), g))
    for j in range(k):
        explained += np.square(values @ q[:, :, j].T)
    return np.asarray(np.argmax(explained, axis=1))


def refine(
    values: Floats,
    basis: Basis,
    theta: Floats,
    *,
    weights: Floats | None = None,
    log_theta: bool = True,
    tolerance: float = 1e-11,
    most_steps: int = 60,
) -> Projected:
    """Damped Gauss-Newton on the projected residual from `theta` (n, p), each row with its own damping."""
    theta = np.array(theta, float)
    n, p = theta.shape
    root = None if weights is None else np.sqrt(weights)
    target = values if root is None else values * root
    damping = np.full(n, 1e-6)
    done = np.zeros(n, bool)
    active = np.arange(n)
    state = _project(target, basis, theta, root, log_theta)
    rss = state[0]
    for _ in range(most_steps):
        if active.size == 0:
            break
        _, gradient, hessian = state
        scale = np.einsum("rii->ri", hessian)
        damped = hessian + (damping[active, None, None] * np.eye(p)) * np.maximum(scale, 1e-300)[:, None, :]
        step = np.clip(solve(damped, gradient), -1.5, 1.5) if log_theta else solve(damped, gradient)
        trial = theta[active] * np.exp(step) if log_theta else theta[active] + step
        new = _project(target[active], basis, trial, None if root is None else root[active], log_theta)
        size = np.max(np.abs(step) if log_theta else np.abs(step) / np.maximum(np.abs(trial), 1e-300), axis=1)
        better = new[0] <= rss[active] * (1.0 + 1e-14)
        theta[active[better]] = trial[better]
        rss[active[better]] = new[0][better]
        damping[active] = np.where(better, damping[active] * 0.1, np.maximum(damping[active] * 10.0, 1e-6))
        settled = size < tolerance
        done[active[settled]] = True
        keep = ~settled & (damping[active] < 1e12)
        pick = (keep & better, keep & ~better)
        state = (
            np.concatenate([new[0][pick[0]], state[0][pick[1]]]),
            np.concatenate([new[1][pick[0]], state[1][pick[1]]]),
            np.concatenate([new[2][pick[0]], state[2][pick[1]]]),
        )
        active = np.concatenate([active[pick[0]], active[pick[1]]])
    return _finish(values, basis, theta, root, log_theta, done)


def _project(
    target: Floats, basis: Basis, theta: Floats, root: Floats | None, log_theta: bool
) -> tuple[Floats, Floats, Floats]:
    """RSS (r,), descent direction's right side (r, p) and Kaufman's normal matrix (r, p, p)."""
    phi, slope = basis(theta)
    if root is not None:
        phi, slope = phi * root[:, :, None], slope * root[:, :, None, None]
    if log_theta:
        slope = slope * theta[:, None, None, :]
    q, upper = _gram_schmidt(phi)
    inside = np.einsum("rmk,rm->rk", q, target)
    residual = target - np.einsum("rmk,rk->rm", q, inside)
    again = np.einsum("rmk,rm->rk", q, residual)  # once more: rounding
    residual = residual - np.einsum("rmk,rk->rm", q, again)
    moved = np.einsum("rmkp,rk->rmp", slope, _back_substitute(upper, inside + again))
    gradient = np.einsum("rmp,rm->rp", moved, residual)
    moved = moved - np.einsum("rmk,rkp->rmp", q, np.einsum("rmk,rmp->rkp", q, moved))
    return np.einsum("rm,rm->r", residual, residual), gradient, np.einsum("rmp,rms->rps", moved, moved)


def _finish(
    values: Floats, basis: Basis, theta: Floats, root: Floats | None, log_theta: bool, done: np.ndarray
) -> Projected:
    phi, slope = basis(theta)
    weighted = phi if root is None else phi * root[:, :, None]
    target = values if root is None else values * root
    q, upper = _gram_schmidt(weighted)
    inside = np.einsum("rmk,rm->rk", q, target)
    inside = inside + np.einsum("rmk,rm->rk", q, target - np.einsum("rmk,rk->rm", q, inside))
    coefficients = _back_substitute(upper, inside)
    fitted = np.einsum("rmk,rk->rm", phi, coefficients)
    jacobian = np.concatenate([np.einsum("rmkp,rk->rmp", slope, coefficients), phi], axis=2)
    if root is not None:
        jacobian = jacobian * root[:, :, None]
    residual = (values - fitted) if root is None else (values - fitted) * root
    return Projected(
        theta=theta,
        coefficients=coefficients,
        fitted=fitted,
        rss=np.einsum("rm,rm->r", residual, residual),
        normal=np.einsum("rmi,rmj->rij", jacobian, jacobian),
        converged=done,
    )


def orthonormal(phi: Floats) -> Floats:
    """Orthonormal basis (r, m, k) of the columns of `phi`; columns without anything new become zero."""
    return _gram_schmidt(phi)[0]


def _gram_schmidt(phi: Floats) -> tuple[Floats, Floats]:
    """Modified Gram-Schmidt, twice, over the few columns: q (r, m, k) and upper triangle (r, k, k)."""
    r, _, k = phi.shape
    q, upper = np.array(phi, float), np.zeros((r, k, k))
    for j in range(k):
        column = q[:, :, j]
        before = np.sqrt(np.einsum("rm,rm->r", column, column))
        for _ in range(2):
            for i in range(j):
                part = np.einsum("rm,rm->r", q[:, :, i], column)
                upper[:, i, j] += part
                column -= part[:, None] * q[:, :, i]
        size = np.sqrt(np.einsum("rm,rm->r", column, column))
        useful = size > 1e-13 * np.maximum(before, 1e-300)
        upper[:, j, j] = np.where(useful, size, np.inf)
        q[:, :, j] = np.where(useful[:, None], column / np.where(useful, size, 1.0)[:, None], 0.0)
    return q, upper


def _back_substitute(upper: Floats, right: Floats) -> Floats:
    k = right.shape[1]
    found = np.zeros_like(right)
    for j in range(k - 1, -1, -1):
        rest = right[:, j] - np.einsum("ri,ri->r", upper[:, j, j + 1 :].copy(), found[:, j + 1 :])
        found[:, j] = np.where(np.isinf(upper[:, j, j]), 0.0, rest / upper[:, j, j])
    return found


def solve(matrix: Floats, right: Floats) -> Floats:
    """Solve small symmetric systems (r, p, p) x = (r, p), scaled to unit diagonal; singular rows give zero."""
    if matrix.shape[-1] == 1:
        pivot = matrix[:, 0]
        return np.asarray(np.where(pivot > 0, right / np.where(pivot > 0, pivot, 1.0), 0.0))
    return np.asarray(np.nan_to_num(np.einsum("rij,rj->ri", inverse(matrix), right), nan=0.0, posinf=0.0, neginf=0.0))


def inverse(matrix: Floats) -> Floats:
    """Inverse of symmetric positive matrices (r, p, p), scaled to unit diagonal first; NaN where singular."""
    diagonal = np.sqrt(np.maximum(np.einsum("rii->ri", matrix), 0.0))
    usable = np.isfinite(matrix).all(axis=(1, 2)) & (diagonal > 0).all(axis=1)
    safe = np.where(usable[:, None], diagonal, 1.0)
    scaled = matrix / (safe[:, :, None] * safe[:, None, :])
    scaled = np.where(usable[:, None, None], scaled, np.eye(matrix.shape[-1]))
    usable &= np.abs(np.linalg.det(scaled)) > 1e-30
    scaled = np.where(usable[:, None, None], scaled, np.eye(matrix.shape[-1]))
    found = np.linalg.inv(scaled) / (safe[:, :, None] * safe[:, None, :])
    usable &= (np.einsum("rii->ri", found) > 0).all(axis=1)
    return np.asarray(np.where(usable[:, None, None], found, np.nan))


def _joined(parts: list[Projected]) -> Projected:
    return Projected(
        theta=np.concatenate([p.theta for p in parts]),
        coefficients=np.concatenate([p.coefficients for p in parts]),
        fitted=np.concatenate([p.fitted for p in parts]),
        rss=np.concatenate([p.rss for p in parts]),
        normal=np.concatenate([p.normal for p in parts]),
        converged=np.concatenate([p.converged for p in parts]),
    )
