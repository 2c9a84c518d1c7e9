"""Centres of vials to a small part of a voxel, from the rims: a disc that lies off centre has a first harmonic.

Around an assumed centre the image is sampled on circles. If the true centre lies further by d, the samples on a circle
of radius rho change by ``-L'(rho) * (d . n)``, where L is the mean over the circle and n the direction: the first
angular harmonic is the displacement times the slope of the profile, whatever the profile (filling, wall, ringing).
Planar shading has a first harmonic that grows with rho and is fitted away. All components count, by their slope: one
Gauss-Newton step for a free radial profile.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from qa.locate.search import Points
from qa.words import Floats, Pixels

_ANGLES = 32
_CIRCLES = 15


def rim_centres(
    components: Pixels, spacing_mm: tuple[float, float], centres: Points, radii_mm: Floats
) -> tuple[Points, NDArray[np.bool_]]:
    """One step from assumed centres to better ones.

    Parameters
    ----------
    components : (components, rows, columns), each with like noise
    spacing_mm : between rows, between columns
    centres : (vials,) complex mm, right and up from the first voxel's centre
    radii_mm : (vials,)

    Returns
    -------
    centres : (vials,) complex mm
    usable : (vials,) False where there is no rim to go by, or the step was too long to be believed
    """
    band = np.minimum(max(2.2 * float(np.mean(spacing_mm)), 1.8), 0.6 * radii_mm)  # (vials,) to either side of the rim
    around = np.exp(1j * np.arange(_ANGLES) * (2 * np.pi / _ANGLES))
    rho = radii_mm[:, None] + band[:, None] * np.linspace(-1, 1, _CIRCLES)  # (vials, circles)
    points = centres[:, None, None] + rho[:, :, None] * around
    samples, inside = _bilinear(components, -points.imag / spacing_mm[0], points.real / spacing_mm[1])
    level = samples.mean(axis=3)  # (components, vials, circles)
    first = 2 * (samples * around).mean(axis=3)  # -L' * (dx + i dy), and shading
    slope = np.gradient(level, axis=2) / np.gradient(rho, axis=1)
    slope, first = _without(slope, rho), _without(first, rho)
    power = (slope**2).sum(axis=(0, 2))
    move = -(slope * first).sum(axis=(0, 2)) / np.where(power > 0, power, 1.0)
    usable = inside.all(axis=(1, 2)) & (power > 0) & (np.abs(move) <= 2 * band)
    move *= np.minimum(1.0, band / np.maximum(np.abs(move), 1e-9))
    return centres + np.where(usable, move, 0), usable


def _without(values: NDArray[np.inexact], rho: Floats) -> NDArray[np.inexact]:
    """Remove what is proportional to `rho` along the last axis."""
    share = (values * rho).sum(axis=-1, keepdims=True) / (rho**2).sum(axis=-1, keepdims=True)
    return np.asarray(values - share * rho)


def _bilinear(images: Pixels, rows: Floats, columns: Floats) -> tuple[NDArray[np.float32], NDArray[np.bool_]]:
    """Samples (images, …) between four voxels, and whether the point lies within the image."""
    height, width = images.shape[1:]
    inside = (rows >= -0.5) & (rows <= height - 0.5) & (columns >= -0.5) & (columns <= width - 0.5)
    rows, columns = np.clip(rows, 0, height - 1.001), np.clip(columns, 0, width - 1.001)
    row, column = rows.astype(np.intp), columns.astype(np.intp)
    dy, dx = (rows - row).astype(np.float32), (columns - column).astype(np.float32)
    flat = images.reshape(len(images), -1)
    at = row * width + column
    upper = flat[:, at] * (1 - dx) + flat[:, at + 1] * dx
    lower = flat[:, at + width] * (1 - dx) + flat[:, at + width + 1] * dx
    return np.asarray(upper * (1 - dy) + lower * dy, dtype=np.float32), np.asarray(inside)
