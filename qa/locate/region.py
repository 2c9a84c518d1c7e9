"""The voxels that are measured for each vial: clear of the wall, without bubbles and artefacts."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from qa.locate.evidence import noise_of
from qa.locate.placement import Placement, Region
from qa.site.plate import Plate
from qa.words import Floats, Ints, Pixels

_CLEAR_VOXELS = 1.5  # from the wall to the nearest side of a voxel: the first ringing lobes lie nearer
_CLEAR_MM = 0.3  # for what the placement and the plate's own making may be off
_FEWEST = 5  # voxels, where the radius allows
_STEPS = (1.5, 1.25, 1.0, 0.75, 0.5, 0.25, 0.0)
_OFF_SHARE = 0.04  # departure of a voxel's amplitude from the smooth one that is let pass whatever the noise
_MOST_SHARE = 0.3  # departure that is never let pass, however much the voxels differ, unless noise explains it
_STRONG = 0.25  # departure from which a voxel's neighbours are left out too
_STEEPEST_PER_MM = 0.02  # relative slope of receive shading within a vial
_DRAWS = 80  # enough to draw three good voxels, though half may be bad, in all but 1 of 40 000 cases
_TIMES = 4.5  # standard deviations that make an outlier


def regions(placement: Placement, plate: Plate, frames: Pixels, spacing_mm: tuple[float, float]) -> tuple[Region, ...]:
    """One region per vial, in the plate's order.

    A voxel belongs if its whole area lies within the inner radius less a margin of 1.5 voxels and 0.3 mm: nearer to
    the wall, partial volume and Gibbs ringing change the signal by several per cent. Where that leaves fewer than 5
    voxels (coarse voxels, thin vials) the margin shrinks by quarters of a voxel until 5 are left, at last to none.
    Voxels whose amplitude departs from the vial's planar shading, or whose course over the frames departs from the
    vial's, are left out and counted.

    Parameters
    ----------
    placement : as `locate` gave it for these frames
    frames : (frames, rows, columns) float32
    spacing_mm : between rows, between columns

    Returns
    -------
    tuple of Region
        `visible` is False where there is no signal in any frame, or nothing sets the place off from its surroundings.
    """
    stack = np.asarray(frames, dtype=np.float32)
    stack = stack[None] if stack.ndim == 2 else stack
    noise = noise_of(stack)
    centre_rows, centre_columns = placement.vial_centres(plate, spacing_mm)
    found = []
    for vial, row, column in zip(plate.vials, centre_rows, centre_columns, strict=True):
        radius = vial.radius_mm * placement.scale
        rows, columns, clear = _within(stack.shape[1:], (row, column), radius, spacing_mm)
        if not len(rows):
            found.append(Region(vial.label, rows, columns, 0, False))
            continue
        signal = stack[:, rows, columns].astype(float)
        y, x = (rows - row) * spacing_mm[0], (columns - column) * spacing_mm[1]
        good = ~outliers(signal, np.stack([y, x]), noise, max(spacing_mm), clear)
        visible = _signal(signal[:, good], noise) and (
            vial.label in placement.seen or _set_off(stack, noise, signal[:, good], (row, column), radius, spacing_mm)
        )
        found.append(Region(vial.label, rows[good], columns[good], int((~good).sum()), bool(visible)))
    return tuple(found)


def _offsets(
    shape: tuple[int, ...], centre: tuple[float, float], reach_mm: float, spacing_mm: tuple[float, float]
) -> tuple[Ints, Ints, Floats, Floats]:
    """Voxels of the square around a centre: rows, columns, and distances from the centre in mm (absolute)."""
    spans = []
    for size, at, step in zip(shape, centre, spacing_mm, strict=True):
        low, high = int(np.floor(at - reach_mm / step)), int(np.ceil(at + reach_mm / step))
        spans.append(np.arange(max(low, 0), min(high, size - 1) + 1))
    rows, columns = (grid.ravel() for grid in np.meshgrid(*spans, indexing="ij"))
    return rows, columns, np.abs(rows - centre[0]) * spacing_mm[0], np.abs(columns - centre[1]) * spacing_mm[1]


def _within(
    shape: tuple[int, ...], centre: tuple[float, float], radius_mm: float, spacing_mm: tuple[float, float]
) -> tuple[Ints, Ints, float]:
    """Voxels wholly inside the radius less the margin that still leaves enough of them; and that margin, voxels."""
    rows, columns, dy, dx = _offsets(shape, centre, radius_mm, spacing_mm)
    corner = np.hypot(dy + 0.5 * spacing_mm[0], dx + 0.5 * spacing_mm[1])
    voxel = max(spacing_mm)
    inside, share = np.zeros(len(rows), dtype=bool), 0.0
    for share in _STEPS:
        inside = corner <= radius_mm - share * voxel - _CLEAR_MM * min(1.0, share / _CLEAR_VOXELS)
        if np.count_nonzero(inside) >= _FEWEST:
            break
    return rows[inside], columns[inside], share


def outliers(
    signal: Floats, offset_mm: Floats, noise: Floats, voxel_mm: float, clear: float = _CLEAR_VOXELS
) -> NDArray[np.bool_]:
    """Voxels that do not belong with the others.

    Parameters
    ----------
    signal : (frames, voxels)
    offset_mm : (2, voxels) from the vial's centre
    noise : (frames,) standard deviation
    voxel_mm : larger side of a voxel
    clear : margin to the wall in voxels; where it is small, ringing makes good voxels differ more

    Returns
    -------
    (voxels,) True for outliers; none where fewer than 5 voxels leave nothing to compare with, and never more than half.

    Notes
    -----
    The vial's course is the median over its voxels in each frame; a voxel's amplitude is its projection on that. The
    amplitude's plane over the vial is fitted by iteratively reweighted least squares with Tukey's weights (Huber and
    Ronchetti 2009, Robust Statistics, 2nd ed., ch. 7), so that receive shading is no outlier.
    """
    voxels = signal.shape[1]
    if voxels < _FEWEST:
        return np.zeros(voxels, dtype=bool)
    sigma = np.maximum(noise, 1e-3 * np.abs(signal).max(axis=1) + 1e-30)[:, None]
    scaled = signal / sigma
    course = np.median(scaled, axis=1)
    power = float(course @ course)
    if power <= 0:
        return np.zeros(voxels, dtype=bool)
    amplitude = course @ scaled / power
    away = amplitude - _plane(amplitude, offset_mm)
    rest = np.sqrt(np.mean((scaled - amplitude[None, :] * course[:, None]) ** 2, axis=0))
    share = _OFF_SHARE * (1 + 2 * (1 - min(clear / _CLEAR_VOXELS, 1)))
    limit = max(min(max(_TIMES * _spread(away), share), _MOST_SHARE), _TIMES * power**-0.5)
    bad = np.abs(away) > limit
    usual = float(np.median(rest))
    # In units of the whole course: a small misfit of a strong signal is no artefact, whatever the noise.
    bad |= rest > usual + max(_TIMES * _spread(rest - usual), share * np.sqrt(power / len(course)))
    strong = np.abs(away) > max(_STRONG, limit)
    if strong.any():
        apart = np.hypot(*(offset_mm[:, :, None] - offset_mm[:, None, strong])).min(axis=1)
        bad |= apart < 1.1 * voxel_mm
    if np.count_nonzero(bad) > voxels // 2:  # then it is not known which half is right: keep the nearest to the plane
        order = np.argsort(np.abs(away))
        bad = np.ones(voxels, dtype=bool)
        bad[order[: voxels - voxels // 2]] = False
    return np.asarray(bad)


def _spread(values: Floats) -> float:
    """Standard deviation from the median absolute value."""
    return 1.4826 * float(np.median(np.abs(values)))


def _plane(values: Floats, offset_mm: Floats) -> Floats:
    """Robust plane through values (near 1) at offsets; with few voxels, their median.

    The start is the plane through three voxels, out of many draws, from which the median distance is least (Rousseeuw
    1984, J. Am. Stat. Assoc. 79, 871-880), among planes no steeper than receive coils make them.
    """
    count = len(values)
    fitted = np.full(count, np.median(values))
    if count < 12:
        return fitted
    basis = np.stack([np.ones(count), *offset_mm], axis=1)
    rng = np.random.default_rng(count)
    some = rng.choice(count, min(count, 120), replace=False)
    drawn = rng.integers(0, count, (_DRAWS, 3))
    corners = basis[drawn]
    planes = np.zeros((_DRAWS + 1, 3))
    planes[-1, 0] = fitted[0]
    firm = np.abs(np.linalg.det(corners)) > 0.02 * np.ptp(offset_mm[0]) * np.ptp(offset_mm[1])
    planes[:-1][firm] = np.linalg.solve(corners[firm], values[drawn[firm]][..., None])[..., 0]
    steep = np.hypot(planes[:, 1], planes[:, 2]) > _STEEPEST_PER_MM
    away = np.median(np.abs(values[some] - planes @ basis[some].T), axis=1)
    away[:-1][~firm] = np.inf
    away[steep] = np.inf
    fitted = basis @ planes[np.argmin(away)]
    for _ in range(5):
        apart = values - fitted
        width = 4.7 * max(_spread(apart), 1e-6)
        weight = np.clip(1 - (apart / width) ** 2, 0, None) ** 2
        if np.count_nonzero(weight) < 6:
            break
        root = np.sqrt(weight)
        plane = np.linalg.lstsq(basis * root[:, None], values * root, rcond=None)[0]
        if np.hypot(plane[1], plane[2]) > _STEEPEST_PER_MM:
            break
        fitted = basis @ plane
    return np.asarray(fitted)


def _signal(signal: Floats, noise: Floats) -> bool:
    """Whether any frame has signal above what magnitude noise alone gives (Rayleigh mean 1.25 sigma)."""
    level = np.median(signal, axis=1)
    return bool(np.any(level > 3.0 * noise) and np.any(level > 0))


def _set_off(
    stack: Pixels,
    noise: Floats,
    signal: Floats,
    centre: tuple[float, float],
    radius_mm: float,
    spacing_mm: tuple[float, float],
) -> bool:
    """Whether the level inside differs in any frame from that around the vial."""
    voxel = max(spacing_mm)
    rows, columns, dy, dx = _offsets(stack.shape[1:], centre, radius_mm + 2 + 3 * voxel, spacing_mm)
    distance = np.hypot(dy, dx)
    ring = (distance > radius_mm + 1.5 + voxel) & (distance < radius_mm + 2 + 3 * voxel)
    if not ring.any() or not signal.shape[1]:
        return False
    around = np.median(stack[:, rows[ring], columns[ring]], axis=1)
    inside = np.median(signal, axis=1)
    doubt = 1.25 * noise * np.sqrt(1 / signal.shape[1] + 1 / np.count_nonzero(ring))
    return bool(np.any(np.abs(inside - around) > np.maximum(6 * doubt, 0.08 * np.maximum(inside, around))))
