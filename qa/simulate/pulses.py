"""Slice profiles: shaped pulses integrated through the Bloch equations, not assumed."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from qa.simulate.truth import PulsePair, Shape
from qa.words import Floats

_STEPS = 96
_FLIPS = np.linspace(0.0, 1.6, 33)  # true over nominal flip angle for which profiles are tabulated


def envelope(shape: Shape, lobes: float, steps: int = _STEPS) -> Floats:
    """The pulse's amplitude over its duration, (steps,), with unit sum.

    `lobes` is the time-bandwidth product: duration times nominal bandwidth.
    """
    t = (np.arange(steps) + 0.5) / steps - 0.5
    if shape == "hard":
        wave = np.ones(steps)
    elif shape == "gaussian":  # full width at half maximum of the spectrum = lobes / duration
        wave = np.exp(-((np.pi * t * lobes) ** 2) / (4 * np.log(2)))
    else:
        window = {"sinc": 0.0, "hamming-sinc": 0.46, "hann-sinc": 0.5}[shape]
        wave = np.sinc(lobes * t) * (1 - window + window * np.cos(2 * np.pi * t))
    return np.asarray(wave / wave.sum())


def spinor(wave: Floats, angle_rad: Floats, cycles: Floats) -> tuple[Floats, Floats]:
    """Squared Cayley-Klein moduli |a|^2 and |b|^2 after a pulse; angles and off-resonance broadcast together.

    The pulse is cut into short pieces of constant field, and the exact rotations are multiplied.
    `cycles` is the precession off resonance, in turns over the whole pulse.

    References
    ----------
    .. [1] Pauly, Le Roux, Nishimura, Macovski (1991), IEEE Trans. Med. Imaging 10(1), 53-65 (Cayley-Klein form).
    """
    angle, turn = np.broadcast_arrays(angle_rad, 2 * np.pi * cycles / len(wave))
    a = np.ones(angle.shape, dtype=complex)
    b = np.zeros(angle.shape, dtype=complex)
    for piece in wave:
        x = angle * piece
        size = np.hypot(x, turn)
        half = np.sinc(size / (2 * np.pi)) / 2  # sin(size / 2) / size
        p = np.cos(size / 2) - 1j * turn * half
        q = -1j * x * half
        a, b = p * a - np.conj(q) * b, q * a + np.conj(p) * b
    return np.abs(a) ** 2, np.abs(b) ** 2


@dataclass(frozen=True, slots=True, eq=False)
class Profiles:
    """Rotation angles across the slice, tabulated over the true flip factor."""

    z: Floats  # (points,), in nominal slice widths from the middle, one side only (pulses are symmetric)
    weight: Floats  # (points,), sums to 1 over one nominal slice width
    flips: Floats  # (flips,)
    excitation: Floats  # (flips, points), radians, of the effective rotation: sin = transverse magnetisation
    refocusing: Floats  # (flips, points), radians: sin^2(angle / 2) = refocused part

    def at(self, flip: Floats) -> tuple[Floats, Floats]:
        """Excitation and refocusing angles, each ``flip.shape + (points,)``, by linear interpolation."""
        place = np.clip(flip, self.flips[0], self.flips[-1]) / (self.flips[1] - self.flips[0])
        low = np.minimum(place.astype(int), len(self.flips) - 2)
        part = (place - low)[..., None]
        return (
            (1 - part) * self.excitation[low] + part * self.excitation[low + 1],
            (1 - part) * self.refocusing[low] + part * self.refocusing[low + 1],
        )


@lru_cache(maxsize=32)
def profiles(pulses: PulsePair, refocusing_deg: float, points: int = 41) -> Profiles:
    """Profiles of a 90 degree excitation and a refocusing pulse of `refocusing_deg`, by Bloch integration.

    Crushers are taken to remove all that the refocusing pulse does not refocus, so only its effective
    angle matters: ``sin^2(angle / 2) = |b|^2``. For a hard excitation the slice is uniform.
    """
    uniform = pulses.excitation == "hard" and pulses.refocusing == "hard"
    reach = 0.5 if uniform else 1.3
    z = (np.arange(points) + 0.5) / points * reach
    scale = _FLIPS[:, None]
    stretched = {"excitation": z, "refocusing": z / pulses.refocusing_width}
    tables = {}
    for name, shape, nominal in (
        ("excitation", pulses.excitation, np.pi / 2),
        ("refocusing", pulses.refocusing, np.deg2rad(refocusing_deg)),
    ):
        if shape == "hard":
            tables[name] = np.broadcast_to(scale * nominal, (len(_FLIPS), points)).copy()
            continue
        wave = envelope(shape, pulses.lobes)
        _, b2 = spinor(wave, scale * nominal, pulses.lobes * stretched[name][None, :])
        angle = 2 * np.arcsin(np.sqrt(np.clip(b2, 0.0, 1.0)))
        tables[name] = angle
    weight = np.full(points, 2 * reach / points)
    return Profiles(z, weight, _FLIPS, tables["excitation"], tables["refocusing"])
