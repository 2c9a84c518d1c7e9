"""Published pulse shapes and the rotation they give across a slice, for profiles that no file states.

References
----------
.. [1] Pauly J, Le Roux P, Nishimura D, Macovski A, IEEE Trans Med Imaging 10 (1991) 53-65 (rotations as spinors; a
   pulse designed in this way has the response of its filter as sin(angle / 2)).
.. [2] Bernstein M A, King K F, Zhou X J, Handbook of MRI Pulse Sequences, Elsevier 2004, chapters 2 and 3 (windowed
   sinc and Gaussian pulses, time-bandwidth product).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from qa.words import Floats

PIECES = 40
FREQUENCIES = np.linspace(0.0, 8.0, 161)  # off resonance, cycles over the pulse; all pulses here are symmetric

Kind = Literal["sinc", "gaussian", "designed"]


@dataclass(frozen=True, slots=True)
class Pulse:
    """One shaped pulse: `kind`, its time-bandwidth product and, for a sinc, the window (0 none, 0.5 Hann)."""

    kind: Kind
    time_bandwidth: float
    window: float = 0.46  # Hamming


def envelope(pulse: Pulse) -> Floats:
    """Amplitude of the pulse in PIECES equal steps, with unit sum."""
    t = (np.arange(PIECES) + 0.5) / PIECES - 0.5
    if pulse.kind == "gaussian":  # the spectrum falls to half its height at half the bandwidth
        wave = np.exp(-np.square(np.pi * pulse.time_bandwidth * t) / (4.0 * np.log(2.0)))
    else:
        wave = np.sinc(pulse.time_bandwidth * t) * (1.0 - pulse.window + pulse.window * np.cos(2.0 * np.pi * t))
    return np.asarray(wave / wave.sum())


def rotation(pulse: Pulse, angles_rad: Floats) -> Floats:
    """Effective rotation, radians (angles, FREQUENCIES): it excites its sine and refocuses sin^2 of its half.

    Parameters
    ----------
    angles_rad : (a,), rotations on resonance
    """
    wave = envelope(pulse)
    angle = np.asarray(angles_rad, float)[:, None]
    if pulse.kind == "designed":  # the filter's response, up to the largest angle it was designed for
        t = (np.arange(PIECES) + 0.5) / PIECES - 0.5
        response = np.abs(np.cos(2.0 * np.pi * FREQUENCIES[:, None] * t) @ wave)
        return np.asarray(2.0 * np.arcsin(np.clip(response, 0.0, 1.0)) / np.pi * angle)
    turn = 2.0 * np.pi * FREQUENCIES / PIECES
    half_turn = np.broadcast_to(turn / 2.0, (len(angle), len(turn)))
    a, b = np.ones(half_turn.shape, complex), np.zeros(half_turn.shape, complex)
    for piece in wave:
        size = np.sqrt(np.square(angle * piece) + np.square(turn)) / 2.0
        share = np.sinc(size / np.pi)  # sin(size) / size
        p, q = np.cos(size) - 1j * half_turn * share, -0.5j * angle * piece * share
        a, b = p * a - np.conj(q) * b, q * a + np.conj(p) * b
    return np.asarray(2.0 * np.arcsin(np.clip(np.abs(b), 0.0, 1.0)))
