"""Extended phase graph of a Carr-Purcell-Meiboom-Gill train, for many trains at once, with derivatives.

In a CPMG train every configuration is real, and just before and after a refocusing pulse only odd orders of dephasing
are occupied, counted in units of half an echo spacing. So a train is three real vectors: F of orders +1, +3, ...,
F of orders -1, -3, ..., and Z of orders 1, 3, ... Orders that cannot return within the train are dropped. What was left
along the field has a train of its own, of even orders, that gives no echo but decides how the next repetition begins.

References
----------
.. [1] Hennig J, J Magn Reson 78 (1988) 397-407 (multiecho sequences with low refocusing angles).
.. [2] Weigel M, J Magn Reson Imaging 41 (2015) 266-295 (review of the method).
"""

from __future__ import annotations

import numpy as np

from qa.words import Floats


def echo_train(
    angle_rad: Floats, spacing_ms: float, t1_ms: Floats, t2_ms: Floats, echoes: int, *, slopes: bool = False
) -> tuple[Floats, Floats, Floats]:
    """Echo amplitudes after an excitation of unit transverse magnetisation.

    Parameters
    ----------
    angle_rad, t1_ms, t2_ms : (r,), refocusing angle of every pulse of the train, relaxation times
    spacing_ms : echo spacing; the first pulse comes half of it after the excitation
    echoes : number m of echoes
    slopes : also give the derivatives

    Returns
    -------
    amplitude, by_angle, by_log_t2 : (m, r) each; signed; the derivatives (per radian, per unit of ln T2) are empty
        without `slopes`
    """
    angle, t1, t2 = (np.ravel(a) for a in np.broadcast_arrays(np.asarray(angle_rad, float), t1_ms, t2_ms))
    r, kinds = angle.size, 3 if slopes else 1
    pulse, turned = _pulse(angle), _pulse_slope(angle)
    rate = spacing_ms / t2  # d e2 / d ln T2 = rate e2
    e1, e2, half = np.exp(-spacing_ms / t1), np.exp(-spacing_ms / t2), np.exp(-0.5 * spacing_ms / t2)
    size = echoes // 2 + 2
    state = np.zeros((3, kinds, size, r))  # F+, F-, Z before the pulse; the amplitude and its two derivatives
    after, part, work = np.empty_like(state), np.empty((3, size, r)), np.empty((kinds, size, r))
    state[0, 0, 0] = half
    if slopes:
        state[0, 2, 0] = half * rate / 2.0
    found = np.empty((kinds, echoes, r))
    for j in range(echoes):
        kept = min(j + 1, echoes - j, size - 1)
        now = after[:, :, :kept]
        _apply(pulse, state[:, :, :kept], now, work[:, :kept])
        if slopes:
            _apply(turned, state[:, 0, :kept], part[:, :kept], work[0, :kept])
            now[:, 1] += part[:, :kept]
        found[:, j] = now[1, :, 0] * half
        if slopes:
            found[2, j] += now[1, 0, 0] * (half * rate / 2.0)
            np.multiply(now[:2, 0], rate, out=part[:2, :kept])
            now[:2, 2] += part[:2, :kept]
        _advance(state, now, kept, e1, e2)
    return found[0], *(found[1:] if slopes else np.empty((2, 0, r)))


def left_along_field(
    angle_rad: Floats, spacing_ms: float, t1_ms: Floats, t2_ms: Floats, echoes: int
) -> tuple[Floats, Floats]:
    """Longitudinal magnetisation at the last echo: the share kept of what the excitation left, and what has regrown.

    Parameters as in `echo_train`; both results are (r,), the second in units of equilibrium.
    """
    angle, t1, t2 = (np.ravel(a) for a in np.broadcast_arrays(np.asarray(angle_rad, float), t1_ms, t2_ms))
    r, pulse = angle.size, _pulse(angle)
    e1, e2 = np.exp(-spacing_ms / t1), np.exp(-spacing_ms / t2)
    half = np.exp(-0.5 * spacing_ms / t1)
    size = echoes // 2 + 2
    state = np.zeros((3, 2, size, r))  # F+, F- and -Z of orders 0, 2, ...; without regrowth from 1, with it from 0
    after, work = np.empty_like(state), np.empty((2, size, r))
    state[2, 0, 0], state[2, 1, 0] = -half, half - 1.0
    for j in range(echoes):
        kept = min(j + 1, echoes - j, size - 1)
        now = after[:, :, :kept]
        _apply(pulse, state[:, :, :kept], now, work[:, :kept])
        if j == echoes - 1:
            break
        np.multiply(now[0], e2, out=state[0, :, 1 : kept + 1])
        np.multiply(now[1, :, 1:], e2, out=state[1, :, : kept - 1])
        state[1, :, kept - 1 : kept + 1] = 0.0
        state[0, :, 0] = -state[1, :, 0]
        np.multiply(now[2], e1, out=state[2, :, :kept])
        state[2, :, kept : kept + 1] = 0.0
        state[2, 1, 0] -= 1.0 - e1
    return -half * after[2, 0, 0], -half * after[2, 1, 0] + 1.0 - half


def _pulse(angle: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """cos^2(a/2), sin^2(a/2), sin a, cos a."""
    cosine = np.cos(angle)
    return (1.0 + cosine) / 2.0, (1.0 - cosine) / 2.0, np.sin(angle), cosine


def _pulse_slope(angle: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    sine = np.sin(angle)
    return -sine / 2.0, sine / 2.0, np.cos(angle), -sine


def _apply(pulse: tuple[Floats, Floats, Floats, Floats], state: Floats, after: Floats, work: Floats) -> None:
    """Rotate (3, ..., r) about the axis along which the magnetisation lies, into `after`; `work` is (..., r)."""
    stay, swap, sine, cosine = pulse
    plus, minus, z = state
    np.multiply(plus, stay, out=after[0])
    np.multiply(minus, swap, out=work)
    after[0] += work
    np.multiply(plus, swap, out=after[1])
    np.multiply(minus, stay, out=work)
    after[1] += work
    np.multiply(z, sine, out=work)
    after[0] += work
    after[1] -= work
    np.subtract(minus, plus, out=after[2])
    after[2] *= 0.5 * sine
    np.multiply(z, cosine, out=work)
    after[2] += work


def _advance(state: Floats, after: Floats, kept: int, e1: Floats, e2: Floats) -> None:
    """Relax for one spacing and dephase by two units, from `after` (the first `kept` orders) into `state`."""
    np.multiply(after[0], e2, out=state[0, :, 1 : kept + 1])
    np.multiply(after[1, :, 0], e2, out=state[0, :, 0])  # order -1 passes the echo and becomes +1
    np.multiply(after[1, :, 1:], e2, out=state[1, :, : kept - 1])
    state[1, :, kept - 1 : kept + 1] = 0.0
    np.multiply(after[2], e1, out=state[2, :, :kept])
    state[2, :, kept : kept + 1] = 0.0
