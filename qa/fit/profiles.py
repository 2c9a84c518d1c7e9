"""Slice profiles that are not known: a mean and a few directions in which published pulse pairs differ from it.

Of a slice profile an echo train sees only how its signal is shared out among refocusing angles. That share is written
on a grid of angles, in which echoes are linear. Over many pairs of published pulses, the shares are described by their
mean and by the few principal components that matter most to the echoes; the data then choose the components' sizes.

References
----------
.. [1] Lebel R M and Wilman A H, Magn Reson Med 64 (2010) 1005-1014 (slice profiles matter to T2 from echo trains).
.. [2] Jolliffe I T, Principal Component Analysis, 2nd ed., Springer 2002.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np

from qa.fit.epg import echo_train
from qa.fit.pulses import FREQUENCIES, Pulse, rotation
from qa.words import Floats

LEVELS = (0.85, 1.0)  # transmit field over nominal; in between and beyond, shares are taken to be linear in it
NODES = 18  # refocusing angles, in units of the angle on resonance
SMALLEST = 0.05
COMPONENTS = 12
RATIOS = np.array([0.65, 0.8, 1.0, 1.25, 1.6, 2.2, 3.5])  # width of the refocused over that of the excited slice
EXCITING: tuple[Pulse, ...] = (
    *(Pulse("sinc", bandwidth, window) for bandwidth in (2.0, 4.0, 6.0) for window in (0.0, 0.46)),
    Pulse("gaussian", 2.0),
    Pulse("designed", 4.0),
    Pulse("designed", 8.0),
)
REFOCUSING: tuple[Pulse, ...] = (*EXCITING, Pulse("sinc", 3.0, 0.5), Pulse("gaussian", 1.2))
PLACES = np.linspace(0.0, 2.5, 121)[1:]  # across the slice, in widths of the excited slice
UNIFORM_SHARE = 0.04  # of all pairs: a refocusing slice so wide that its angle does not vary
TYPICAL = ((30.0, 2.5), (80.0, 8.0), (150.0, 25.0), (240.0, 50.0))  # T1 and T2 in echo spacings, and
TYPICAL_ECHOES = 24  # how many echoes decide what matters to the echoes


@dataclass(frozen=True, slots=True, eq=False)
class Profiles:
    """How the signal is shared out; q angles, k components; arrays (2, ...) hold one for each of LEVELS.

    The signal meant is that of a train's plateau, excited signal times sin(angle / 2).
    """

    angle: Floats  # (q,), radians, at a transmit level of 1
    mean: Floats  # (2, q), sums to 1
    components: Floats  # (2, k, q), of one standard deviation over the pulse pairs; each sums to 0
    excitation: Floats  # (q,), mean excitation angle, radians

    def at(self, level: Floats, sizes: Floats) -> tuple[Floats, Floats, Floats]:
        """Shares (n, q), their derivatives by level (n, q), and by size (n, k, q), at transmit levels (n,).

        `sizes` (k,) of the components are in standard deviations.
        """
        high = (np.asarray(level, float) - LEVELS[0]) / (LEVELS[1] - LEVELS[0])
        part = np.stack([1.0 - high, high], axis=1)
        both = self.mean + np.tensordot(sizes, self.components, axes=(0, 1))  # (2, q)
        slope = np.broadcast_to((both[1] - both[0]) / (LEVELS[1] - LEVELS[0]), (len(part), both.shape[1]))
        return part @ both, slope, np.tensordot(part, self.components, axes=(1, 0))


@cache
def unknown_profiles(refocusing_deg: float) -> Profiles:
    """What pulse pairs of a nominal refocusing angle can give when nothing else is known of them."""
    nominal = np.deg2rad(refocusing_deg)
    angle = nominal * np.linspace(SMALLEST, 1.0, NODES)
    share, excitation = shares(refocusing_deg)  # (pairs, 2, q), (q,)
    uniform = np.zeros((round(UNIFORM_SHARE * len(share)), 2, NODES))
    uniform[:, :, -1] = 1.0
    share = np.concatenate([share, uniform])
    mean = share.mean(axis=0)
    echoes = np.concatenate(
        [(share[:, row] - mean[row]) @ _typical(angle * level) for row, level in enumerate(LEVELS)], 1
    )
    power, direction = np.linalg.eigh(echoes.T @ echoes)
    largest = np.argsort(power)[::-1][:COMPONENTS]
    score = echoes @ direction[:, largest]
    score /= np.sqrt(np.mean(np.square(score), axis=0))
    components = np.einsum("pk,plq->lkq", score, share - mean) / len(share)
    return Profiles(angle, mean, components, excitation)


def _typical(angle: Floats) -> Floats:
    """Echoes (q, vials x echoes) of typical vials for each angle, per unit of plateau signal."""
    return np.concatenate(
        [
            (echo_train(angle, 1.0, np.array(t1), np.array(t2), TYPICAL_ECHOES)[0] / np.sin(angle / 2.0)).T
            for t1, t2 in TYPICAL
        ],
        axis=1,
    )


def shares(refocusing_deg: float) -> tuple[Floats, Floats]:
    """Shares (pairs, 2, q) for every pair of pulses and ratio of widths, and the mean excitation angle (q,)."""
    levels = np.array(LEVELS)
    nominal = np.deg2rad(refocusing_deg)
    refocused = [rotation(pulse, levels * nominal) for pulse in REFOCUSING]
    widths = [_width(np.sin(angle[1] / 2.0) ** 2) for angle in refocused]
    alpha = np.stack(
        [
            [np.interp(np.multiply.outer(width / RATIOS, PLACES), FREQUENCIES, row, right=0.0) for row in angle]
            for angle, width in zip(refocused, widths, strict=True)
        ]
    )  # (refocusing, 2, ratios, z)
    alpha = np.swapaxes(alpha, 1, 2).reshape(-1, 2, len(PLACES))
    half = np.sin(alpha / 2.0)
    place = (alpha / (levels[:, None] * nominal) - SMALLEST) / (1.0 - SMALLEST) * (NODES - 1)
    low = np.clip(np.floor(place).astype(np.intp), 0, NODES - 2)
    part = np.clip(place - low, 0.0, 1.0)
    row = (np.arange(len(alpha))[:, None, None] * 2 + np.arange(2)[:, None]) * NODES + low
    found, by_excitation = [], np.zeros(NODES)
    for pulse in EXCITING:
        excited = rotation(pulse, levels * np.pi / 2.0)
        width = _width(np.sin(excited[1]))
        theta = np.stack([np.interp(width * PLACES, FREQUENCIES, line, right=0.0) for line in excited])
        signal = np.sin(theta) * half
        size = len(alpha) * 2 * NODES
        share = np.bincount(row.ravel(), (signal * (1.0 - part)).ravel(), size)
        share += np.bincount(row.ravel() + 1, (signal * part).ravel(), size)
        share = share.reshape(-1, 2, NODES)
        total = share.sum(axis=2, keepdims=True)
        found.append(share / total)
        turned = np.bincount(low.ravel(), (signal * theta / total).ravel(), NODES)
        by_excitation += turned / np.maximum(np.bincount(low.ravel(), (signal / total).ravel(), NODES), 1e-12)
    by_excitation[-1] = by_excitation[-2]
    return np.concatenate(found), by_excitation / len(EXCITING)


def _width(response: Floats) -> float:
    """Full width at half maximum, cycles over the pulse."""
    below = int(np.flatnonzero(response < 0.5 * response[0])[0])
    part = (response[below - 1] - 0.5 * response[0]) / (response[below - 1] - response[below])
    return float(2.0 * (FREQUENCIES[below - 1] + part * (FREQUENCIES[1] - FREQUENCIES[0])))
