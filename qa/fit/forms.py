"""Signal forms that are linear in all but one or two parameters, as bases for the variable projection engine."""

from __future__ import annotations

import numpy as np

from qa.fit.varpro import Basis
from qa.words import Floats


def offset_and_decays(times: Floats) -> Basis:
    """1, exp(-t R_1), exp(-t R_2)...: recovery curves and multi-component decays with an offset; theta = rates."""
    plain = decays(times)

    def basis(rates: Floats) -> tuple[Floats, Floats]:
        phi, slope = plain(rates)
        ones = np.ones((*phi.shape[:2], 1))
        return np.concatenate([ones, phi], axis=2), np.concatenate([np.zeros((*ones.shape, rates.shape[1])), slope], 2)

    return basis


def decays(times: Floats) -> Basis:
    """exp(-t R_1), exp(-t R_2)...; theta = rates (r, p), one column per rate."""
    times = np.asarray(times, float)

    def basis(rates: Floats) -> tuple[Floats, Floats]:
        phi = np.exp(-times[None, :, None] * rates[:, None, :])
        slope = (-times[None, :, None] * phi)[..., None] * np.eye(rates.shape[1])
        return phi, slope

    return basis


def saturating(times: Floats) -> Basis:
    """1 - exp(-t R): recovery from complete saturation; theta = the rate (r, 1)."""
    times = np.asarray(times, float)

    def basis(rates: Floats) -> tuple[Floats, Floats]:
        decay = np.exp(-times * rates)
        return -np.expm1(-times * rates)[:, :, None], (times * decay)[:, :, None, None]

    return basis
