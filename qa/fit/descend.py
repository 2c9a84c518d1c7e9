"""Batched damped least squares (Levenberg-Marquardt) for models that are not separable.

Needed where the noise floor is part of the model: the expected magnitude is not linear in the amplitude any more.

References
----------
.. [1] Marquardt D W, J Soc Ind Appl Math 11 (1963) 431-441.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from qa.fit.varpro import inverse, solve
from qa.words import Floats, Ints

# parameters (r, p), indices (r,) of the rows they belong to -> amplitudes (r, m), Jacobian (r, m, p)
Model = Callable[[Floats, Ints], tuple[Floats, Floats]]


@dataclass(frozen=True, slots=True, eq=False)
class Descent:
    """Parameters at the minimum; n rows, m samples, p parameters."""

    parameters: Floats  # (n, p)
    fitted: Floats  # (n, m)
    jacobian: Floats  # (n, m, p)
    chi2: Floats  # (n,), weighted
    converged: np.ndarray  # (n,) bool

    def covariance(self, weights: Floats) -> Floats:
        """(n, p, p) for weights (n, m) = 1 / variance; NaN where the data determine nothing."""
        return inverse(np.einsum("rmi,rm,rmj->rij", self.jacobian, weights, self.jacobian))


def descend(
    values: Floats,
    model: Model,
    start: Floats,
    weights: Floats,
    *,
    positive: int = 1,
    tolerance: float = 1e-8,
    most_steps: int = 40,
) -> Descent:
    """Minimise sum w (y - f)^2 for each row.

    Parameters
    ----------
    values, weights : (n, m)
    model : see `Model`
    start : (n, p)
    positive : the first so many parameters are positive and are stepped in their logarithm
    """
    parameters = np.array(start, float)
    n, p = parameters.shape
    damping = np.full(n, 1e-4)
    done = np.zeros(n, bool)
    active = np.arange(n)
    f, jac = model(parameters, active)
    chi2 = np.einsum("rm,rm->r", weights, np.square(values - f))
    fitted, jacobian = f, jac
    for _ in range(most_steps):
        if active.size == 0:
            break
        logs = jacobian[active].copy()
        logs[:, :, :positive] *= parameters[active, None, :positive]
        weighted = logs * weights[active][:, :, None]
        gradient = np.einsum("rmp,rm->rp", weighted, values[active] - fitted[active])
        hessian = np.einsum("rmp,rms->rps", weighted, logs)
        diagonal = np.einsum("rii->ri", hessian)
        step = solve(hessian + np.eye(p) * (damping[active, None] * np.maximum(diagonal, 1e-300))[:, None, :], gradient)
        trial = parameters[active].copy()
        step[:, :positive] = np.clip(step[:, :positive], -1.0, 1.0)
        trial[:, :positive] *= np.exp(step[:, :positive])
        trial[:, positive:] += step[:, positive:]
        f, jac = model(trial, active)
        new = np.einsum("rm,rm->r", weights[active], np.square(values[active] - f))
        better = new <= chi2[active] * (1.0 + 1e-13)
        size = np.sqrt(np.maximum(np.einsum("rp,rp->r", step, gradient), 0.0))  # how far chi would still fall
        rows = active[better]
        parameters[rows], chi2[rows], fitted[rows], jacobian[rows] = trial[better], new[better], f[better], jac[better]
        damping[active] = np.where(better, damping[active] * 0.1, damping[active] * 10.0)
        settled = (size <= tolerance * np.sqrt(chi2[active] + 1e-300)) | (np.abs(step[:, 0]) < tolerance * 1e-2)
        done[active[settled]] = True
        active = active[~settled & (damping[active] < 1e10)]
    return Descent(parameters, fitted, jacobian, chi2, done)
