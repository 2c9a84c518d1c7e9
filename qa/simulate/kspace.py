"""Discs as a scanner sees them: sampled in k-space, so that partial volume and Gibbs ringing are real."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from qa.words import Floats


def window(matrix: int, filtering: float, sampled: int | None = None) -> Floats:
    """Weight per k-space line, (matrix,), index 0 at the most negative frequency.

    `filtering` 0.46 is Hamming's window over the `sampled` middle lines; lines not sampled have weight 0.
    """
    k = np.arange(matrix) - matrix // 2
    lines = sampled or matrix
    inside = (k >= -(lines // 2)) & (k < lines - lines // 2)
    return np.where(inside, 1 - filtering + filtering * np.cos(2 * np.pi * k / lines), 0.0)


def noise(
    shape: tuple[int, int, int], sigma: float, weight: Floats, rng: np.random.Generator
) -> NDArray[np.complex128]:
    """Complex Gaussian noise images; white in k-space, so a window or zero filling makes neighbours alike.

    Without either, real and imaginary part of each voxel have standard deviation `sigma`, independently.
    """
    white = rng.normal(0.0, sigma, (*shape, 2)).view(complex)[..., 0]
    if np.all(weight == 1):
        return white
    centred = np.fft.ifftshift(weight[:, None] * weight[None, :])
    return np.asarray(np.fft.ifft2(np.fft.fft2(white) * centred))


def discs(
    x_mm: Floats,
    y_mm: Floats,
    radius_mm: Floats,
    *,
    matrix: int,
    field_of_view_mm: float,
    weight: Floats | None = None,
) -> Floats:
    """Images of uniform discs of height 1, (discs, matrix, matrix), float64; row 0 at the top.

    The Fourier transform of a disc is known in closed form; it is sampled as a Cartesian scan samples it,
    on `matrix` x `matrix` points 1 / field of view apart, weighted by `weight` along both axes (see `window`),
    and transformed back. What lies outside
    the field of view folds in, as it would. Centres are in mm from the image's centre, x to the right, y up.

    References
    ----------
    .. [1] Bracewell (2000), The Fourier Transform and Its Applications, 3rd ed. (jinc function).
    """
    from scipy.special import j1

    k = (np.arange(matrix) - matrix // 2) / field_of_view_mm
    size = np.hypot(k[:, None], k[None, :])
    voxel = field_of_view_mm / matrix
    weight = np.ones(matrix) if weight is None else weight
    first = -(matrix - 1) / 2 * voxel  # the first voxel's centre; rows run downwards
    out = np.empty((len(x_mm), matrix, matrix))
    spectra: dict[float, Floats] = {}
    centring = np.exp(2j * np.pi * k * first)
    for index, (x, y, radius) in enumerate(zip(x_mm, y_mm, radius_mm, strict=True)):
        if radius not in spectra:
            with np.errstate(invalid="ignore", divide="ignore"):
                jinc = radius * j1(2 * np.pi * radius * size) / size
            jinc[size == 0] = np.pi * radius**2
            spectra[radius] = jinc * weight[:, None] * weight[None, :] / field_of_view_mm**2
        across = centring * np.exp(-2j * np.pi * k * x)
        down = centring * np.exp(2j * np.pi * k * y)
        spectrum = spectra[radius] * down[:, None] * across[None, :]
        out[index] = np.fft.ifft2(np.fft.ifftshift(spectrum)).real * matrix**2
    return out
