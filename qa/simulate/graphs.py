"""Extended phase graphs of an echo train, on complex states, for many spins at once.

Written for the simulator alone: the fit has its own, so that one checks the other.
"""

from __future__ import annotations

import numpy as np

from qa.words import Floats


def echo_train(
    t1_ms: Floats,
    t2_ms: Floats,
    excitation_rad: Floats,
    refocusing_rad: Floats,
    spacing_ms: float,
    echoes: int,
    *,
    start: Floats | float = 1.0,
) -> tuple[Floats, Floats]:
    """Echo amplitudes of a Carr-Purcell-Meiboom-Gill train, and the longitudinal magnetisation it leaves behind.

    Parameters
    ----------
    t1_ms, t2_ms, excitation_rad, refocusing_rad, start : broadcastable to one shape S
        `start` is the longitudinal magnetisation before excitation, 1 at equilibrium. All refocusing
        pulses are alike and act about the axis of the excited magnetisation.
    spacing_ms : echo spacing in ms; refocusing pulses at 0.5, 1.5, ... spacings.
    echoes : number of echoes.

    Returns
    -------
    amplitudes : S + (echoes,), signed, relative to equilibrium
    remaining : S, longitudinal magnetisation at the last echo

    References
    ----------
    .. [1] Hennig (1988), J. Magn. Reson. 78, 397-407.
    .. [2] Weigel (2015), J. Magn. Reson. Imaging 41, 266-295 (notation: F+, F-, Z states).
    """
    t1, t2, first, angle, mz = (
        np.asarray(a, dtype=float)[..., None]
        for a in np.broadcast_arrays(t1_ms, t2_ms, excitation_rad, refocusing_rad, start)
    )
    shape = t1.shape[:-1]
    orders = echoes + 1  # a state dephased further than this cannot come back in time
    ahead = np.zeros((*shape, orders), dtype=complex)  # F+ of order 0 .. orders - 1
    behind = np.zeros_like(ahead)  # F- of order 0 .. (its order 0 is the conjugate of F+ order 0)
    along = np.zeros_like(ahead)  # Z
    ahead[..., :1] = mz * np.sin(first)
    behind[..., :1] = mz * np.sin(first)
    along[..., :1] = mz * np.cos(first)
    decay, recovery = np.exp(-spacing_ms / 2 / t2), np.exp(-spacing_ms / 2 / t1)
    cos2, sin2 = np.cos(angle / 2) ** 2, np.sin(angle / 2) ** 2
    sine, cosine = 1j * np.sin(angle), np.cos(angle)
    amplitudes = np.empty((*shape, echoes))

    def half_spacing() -> None:
        nonlocal ahead, behind, along
        ahead *= decay
        behind *= decay
        along *= recovery
        along[..., :1] += 1 - recovery
        risen = np.empty_like(ahead)
        risen[..., 1:] = ahead[..., :-1]
        fallen = np.zeros_like(behind)
        fallen[..., :-1] = behind[..., 1:]
        risen[..., 0] = np.conj(fallen[..., 0])
        ahead, behind = risen, fallen

    for echo in range(echoes):
        half_spacing()
        mixed = sine * along
        halves = sine / 2 * (ahead - behind)
        ahead, behind, along = (
            cos2 * ahead + sin2 * behind - mixed,
            sin2 * ahead + cos2 * behind + mixed,
            cosine * along - halves,
        )
        half_spacing()
        amplitudes[..., echo] = ahead[..., 0].real
    return amplitudes, along[..., 0].real
