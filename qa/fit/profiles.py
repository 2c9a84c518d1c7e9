"""Slice profiles that are not known: a mean and a few directions in which published pulse pairs differ from it.

Of a slice profile an echo train sees only how the refocusing angle is spread over the excited signal. That spread is
written as the angle against the share of the signal that comes from smaller angles. Over many pairs of published
pulses, these curves are well described by their mean and a few principal components, whose sizes the data then choose.

References
----------
.. [1] Lebel R M and Wilman A H, Magn Reson Med 64 (2010) 1005-1014 (slice profiles matter to T2 from echo trains).
.. [2] Jolliffe I T, Principal Component Analysis, 2nd ed., Springer 2002.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np

from qa.fit.pulses import FREQUENCIES, Pulse, rotation
from qa.words import Floats

LEVELS = (0.85, 1.0)  # transmit field over nominal; in between and beyond, angles are taken to be linear in it
NODES = 14  # of the quadrature over the signal
COMPONENTS = 6
RATIOS = np.array([0.65, 0.8, 1.0, 1.25, 1.6, 2.2, 3.5])  # width of the refocused over that of the excited slice
EXCITING: tuple[Pulse, ...] = (
    *(Pulse("sinc", bandwidth, window) for bandwidth in (2.0, 4.0, 6.0) for window in (0.0, 0.46)),
    Pulse("gaussian", 2.0),
    Pulse("designed", 4.0),
    Pulse("designed", 8.0),
)
REFOCUSING: tuple[Pulse, ...] = (*EXCITING, Pulse("sinc", 3.0, 0.5), Pulse("gaussian", 1.2))
PLACES = np.linspace(0.0, 2.5, 121)[1:]  # across the slice, in widths of the excited slice
DARK = 0.02  # sin(angle / 2), below which a part of the slice gives no signal worth counting
UNIFORM_SHARE = 0.04  # of all pairs: a refocusing slice so wide that its angle does not vary


@dataclass(frozen=True, slots=True, eq=False)
class Profiles:
    """Spreads of the refocusing angle: q nodes, k components; every array is (2, ...), one for each of LEVELS."""

    weight: Floats  # (q,), of each node in the signal of a train's plateau; sums to 1
    mean: Floats  # (2, q), refocusing angle, radians
    components: Floats  # (2, k, q), radians for one standard deviation over the pulse pairs
    excitation: Floats  # (2, q), mean excitation angle, radians

    def at(self, level: Floats, sizes: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        """Angles at each vial's transmit level.

        Parameters
        ----------
        level : (n,), true over nominal flip angle
        sizes : (k,), of the components, in standard deviations

        Returns
        -------
        angle (n, q), by_level (n, q), by_size (n, k, q), excitation (n, q)
        """
        high = (np.asarray(level, float) - LEVELS[0]) / (LEVELS[1] - LEVELS[0])
        share = np.stack([1.0 - high, high], axis=1)
        both = self.mean + np.tensordot(sizes, self.components, axes=(0, 1))  # (2, q)
        slope = np.broadcast_to((both[1] - both[0]) / (LEVELS[1] - LEVELS[0]), (len(share), both.shape[1]))
        return share @ both, slope, np.tensordot(share, self.components, axes=(1, 0)), share @ self.excitation


@cache
def unknown_profiles(refocusing_deg: float) -> Profiles:
    """What pulse pairs of a nominal refocusing angle can give when nothing else is known of them."""
    angle, excitation = spreads(refocusing_deg)
    uniform = np.deg2rad(refocusing_deg) * np.array(LEVELS)[:, None] * np.ones((1, NODES))
    angle = np.concatenate([angle, np.broadcast_to(uniform, (round(UNIFORM_SHARE * len(angle)), 2, NODES))])
    weight = nodes()[1]
    mean = angle.mean(axis=0)
    spread = ((angle - mean) * np.sqrt(weight)).reshape(len(angle), -1)
    power, direction = np.linalg.eigh(spread.T @ spread / len(angle))
    largest = np.argsort(power)[::-1][:COMPONENTS]
    components = (np.sqrt(power[largest]) * direction[:, largest]).T.reshape(COMPONENTS, 2, NODES) / np.sqrt(weight)
    return Profiles(weight, mean, np.ascontiguousarray(np.swapaxes(components, 0, 1)), excitation.mean(axis=0))


def nodes() -> tuple[Floats, Floats]:
    """Places in 0..1 and weights of the quadrature, close together at the small angles of the slice's edge."""
    edges = np.linspace(0.0, 1.0, NODES + 1)
    return np.square((edges[1:] + edges[:-1]) / 2.0), np.diff(np.square(edges))


def spreads(refocusing_deg: float) -> tuple[Floats, Floats]:
    """Refocusing and excitation angles, radians, at the nodes for every pair and ratio: (pairs, 2, q) each."""
    levels = np.array(LEVELS)
    refocused = [rotation(pulse, levels * np.deg2rad(refocusing_deg)) for pulse in REFOCUSING]
    widths = [_width(np.sin(angle[1] / 2.0) ** 2) for angle in refocused]
    alpha = np.stack(
        [
            [np.interp(np.multiply.outer(width / RATIOS, PLACES), FREQUENCIES, row, right=0.0) for row in angle]
            for angle, width in zip(refocused, widths, strict=True)
        ]
    )  # (refocusing, 2, ratios, z)
    alpha = np.swapaxes(alpha, 1, 2).reshape(-1, 2, len(PLACES))
    found = []
    for pulse in EXCITING:
        excited = rotation(pulse, levels * np.pi / 2.0)
        width = _width(np.sin(excited[1]))
        theta = np.stack([np.interp(width * PLACES, FREQUENCIES, row, right=0.0) for row in excited])
        found.append(_at_nodes(alpha, np.broadcast_to(theta, alpha.shape)))
    return np.concatenate([angle for angle, _ in found]), np.concatenate([theta for _, theta in found])


def _width(response: Floats) -> float:
    """Full width at half maximum, cycles over the pulse."""
    below = int(np.flatnonzero(response < 0.5 * response[0])[0])
    part = (response[below - 1] - 0.5 * response[0]) / (response[below - 1] - response[below])
    return float(2.0 * (FREQUENCIES[below - 1] + part * (FREQUENCIES[1] - FREQUENCIES[0])))


def _at_nodes(alpha: Floats, theta: Floats) -> tuple[Floats, Floats]:
    """Angles against the share of the signal, (r, 2, q) each, from angles across the slice (r, 2, z)."""
    half = np.sin(alpha / 2.0)
    signal = np.sin(theta) * np.where(half > DARK, half, 0.0)
    order = np.argsort(alpha, axis=-1)
    signal, alpha, theta = (np.take_along_axis(a, order, axis=-1) for a in (signal, alpha, theta))
    share = np.cumsum(signal, axis=-1)
    share = (share - 0.5 * signal) / share[..., -1:]
    places = nodes()[0]
    above = np.sum(share[..., None, :] < places[:, None], axis=-1)
    above = np.clip(above, 1, alpha.shape[-1] - 1)
    s0, s1 = (np.take_along_axis(share, above + k, axis=-1) for k in (-1, 0))
    part = np.clip((places - s0) / np.maximum(s1 - s0, 1e-12), 0.0, 1.0)

    def between(values: Floats) -> Floats:
        low, high = (np.take_along_axis(values, above + k, axis=-1) for k in (-1, 0))
        return np.asarray(low + part * (high - low))

    return between(alpha), between(theta)
