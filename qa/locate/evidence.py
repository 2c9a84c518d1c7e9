"""Where in the images could the centre of a vial be? Maps of evidence, whatever the contrast.

A vial shows as a disc whose signal differs from its surroundings by some amount, brighter or darker, another amount in
every frame. So the evidence at a point is the share of the signal variance inside a small round window, over all
frames, that is explained by "offset + amplitude x disc" with free offset and amplitude per frame: a squared
correlation coefficient, 0 to 1 (normalised cross-correlation, Lewis 1995, "Fast normalized cross-correlation", Vision
Interface, 120-123, here with vector-valued pixels). Frames enter as their principal components, noise-normalised.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.words import Floats, Pixels

_KEPT = 6  # principal components: recovery curves and echo trains of many vials span fewer dimensions
_RELATIVE_FLOOR = 0.01  # of a frame's range: structure below this never dominates, however low the noise
_WALL_MM = 1.2  # of a vial, where it can be told from filling and surroundings; thicknesses near it serve as well
_PIXELS_PER_RADIUS = 3.6  # of the search grid, smallest vial


@dataclass(frozen=True, slots=True, eq=False)
class Working:
    """The components on a grid of nearly square pixels, coarse for fine images, finer for coarse ones.

    A point at (row, column) voxels of the image lies at ``(row + pad) * step`` pixels of this grid.
    """

    components: Pixels  # (components, rows, columns)
    step: tuple[float, float]  # working pixels per image voxel, along rows and columns
    pad: tuple[int, int]  # image voxels added before the first row and column
    pixel_mm: tuple[float, float]
    noise: float  # variance of one component in one pixel that is expected of noise
    transfer: Pixels  # (rows, columns // 2 + 1) k-space weight that both image and templates went through


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """One map per size of vial; values 0 to 1."""

    maps: Pixels  # (sizes, rows, columns)
    size_of: tuple[int, ...]  # for each vial, the map that suits its radius
    working: Working


def noise_of(frames: Pixels) -> Floats:
    """Noise standard deviation of each frame, (frames,), from second differences along the rows.

    The median makes it insensitive to edges; voxels that are exactly alike (background set to zero by the scanner)
    are left out. It is a lower figure in pure background, where magnitude noise is Rayleigh distributed.
    """
    every = max(1, frames.shape[1] // 48)
    part = frames[:, ::every, :]
    second = np.abs(part[:, :, 1:-1] - 0.5 * (part[:, :, :-2] + part[:, :, 2:])).reshape(len(frames), -1)
    out = np.zeros(len(frames))
    for k, row in enumerate(second):
        used = row[row > 0]
        if used.size > 16:
            out[k] = np.median(used) / (0.6745 * np.sqrt(1.5))
    return out


def principal(frames: Pixels) -> tuple[Pixels, Floats]:
    """Noise-normalised principal components of the frames.

    Parameters
    ----------
    frames : (frames, rows, columns) float32, each frame in its own linear unit

    Returns
    -------
    components : (components, rows, columns) float32, in units of the noise
    mixing : (components, frames) weights that give them from the frames
    """
    count, rows, columns = frames.shape
    every = max(1, min(rows, columns) // 96)
    part = frames[:, ::every, ::every].reshape(count, -1)
    low, high = np.percentile(part[:, :: max(1, part.shape[1] // 4000)], [0.5, 99.5], axis=1)
    scale = np.maximum(noise_of(frames), _RELATIVE_FLOOR * (high - low))
    scale = np.where(scale > 0, scale, np.inf)
    centred = (part - part.mean(axis=1, keepdims=True)) / scale[:, None].astype(np.float32)
    values, vectors = np.linalg.eigh((centred @ centred.T).astype(float) / centred.shape[1])
    order = np.argsort(values)[::-1]
    kept = int(np.clip(np.count_nonzero(values > 2.0), min(count, 3), _KEPT))
    mixing = vectors[:, order[:kept]].T / scale[None, :]
    mixed = mixing.astype(np.float32) @ frames.reshape(count, -1)
    return mixed.reshape(kept, rows, columns), mixing


def _fast(size: float) -> int:
    """The smallest number not below `size` with no prime factor above 5, even."""
    best = 1 << int(np.ceil(np.log2(max(size, 2))))
    for five in (1, 5, 25, 125):
        for three in (1, 3, 9, 27, 81):
            base = five * three
            power = max(1, int(np.ceil(np.log2(max(size / base, 1)))))
            best = min(best, base << power)
    return best


def resample(components: Pixels, spacing_mm: tuple[float, float], smallest_mm: float, largest_mm: float) -> Working:
    """Put the components on the search grid by cutting or padding k-space (the native interpolation of MR images)."""
    target = smallest_mm / _PIXELS_PER_RADIUS
    count, rows, columns = components.shape
    shape, pad, work = [], [], []
    for size, step in zip((rows, columns), spacing_mm, strict=True):
        border = int(np.ceil(1.5 * largest_mm / step)) + 2
        padded = _fast(size + 2 * border)
        shape.append(padded)
        pad.append((padded - size) // 2)
        work.append(_fast(padded * step / target))
    middle = np.median(components[:, ::3, ::3].reshape(count, -1), axis=1)
    block = np.empty((count, shape[0], shape[1]), dtype=np.float32)
    block[:] = middle.astype(np.float32)[:, None, None]
    _fill(block, components, pad)
    spectrum = np.fft.rfft2(block)
    cut_rows, cut_columns = min(shape[0], work[0]), min(shape[1], work[1])
    ky, kx = np.fft.fftfreq(work[0]) * work[0], np.arange(work[1] // 2 + 1)
    weight_y = _taper(np.abs(ky) / (cut_rows / 2))
    weight_x = _taper(kx / (cut_columns / 2))
    transfer = (weight_y[:, None] * weight_x[None, :]).astype(np.float32)
    target_spectrum = np.zeros((count, work[0], work[1] // 2 + 1), dtype=spectrum.dtype)
    half, wide = cut_rows // 2, cut_columns // 2
    target_spectrum[:, :half, :wide] = spectrum[:, :half, :wide]
    target_spectrum[:, -half + 1 :, :wide] = spectrum[:, -half + 1 :, :wide]
    gain = work[0] * work[1] / (shape[0] * shape[1])
    target_spectrum *= transfer * np.float32(gain)
    small = np.fft.irfft2(target_spectrum, s=(work[0], work[1])).astype(np.float32)
    passed = float(np.sum(weight_y**2) * (2 * np.sum(weight_x**2) - 1)) / (shape[0] * shape[1])
    return Working(
        components=small,
        step=(work[0] / shape[0], work[1] / shape[1]),
        pad=(pad[0], pad[1]),
        pixel_mm=(spacing_mm[0] * shape[0] / work[0], spacing_mm[1] * shape[1] / work[1]),
        noise=passed,
        transfer=transfer,
    )


def _fill(block: Pixels, components: Pixels, pad: list[int]) -> None:
    """Lay the image into the padded block, its border fading to the middle value over the padding."""
    _, rows, columns = components.shape
    top, left = pad
    block[:, top : top + rows, left : left + columns] = components
    below, right = block.shape[1] - top - rows, block.shape[2] - left - columns
    flat = block[:, :1, :1].copy()
    inside = block[:, top : top + rows, :]
    for width, slot, edge in ((left, slice(0, left), left), (right, slice(left + columns, None), left + columns - 1)):
        fade = _fade(width) if edge != left else _fade(width)[::-1]
        inside[:, :, slot] = flat + (inside[:, :, edge : edge + 1] - flat) * fade[None, None, :]
    for width, slot, edge in ((top, slice(0, top), top), (below, slice(top + rows, None), top + rows - 1)):
        fade = _fade(width) if edge != top else _fade(width)[::-1]
        block[:, slot, :] = flat + (block[:, edge : edge + 1, :] - flat) * fade[None, :, None]


def _fade(width: int) -> Pixels:
    return (0.5 + 0.5 * np.cos(np.pi * (np.arange(width) + 1) / (width + 1))).astype(np.float32)


def _taper(relative: Floats) -> Floats:
    """Cosine edge over the outer 40 % of the band, so that cutting k-space does not ring."""
    return np.where(relative >= 1, 0.0, np.cos(0.5 * np.pi * np.clip((relative - 0.6) / 0.4, 0, 1)) ** 2)


def sizes_of(radii_mm: Floats) -> tuple[Floats, tuple[int, ...]]:
    """Group radii that differ by under 7 %: radius of each group (mm) and the group of each vial."""
    order = np.argsort(radii_mm)
    groups: list[list[int]] = []
    for index in order:
        if groups and radii_mm[index] <= 1.07 * radii_mm[groups[-1][0]]:
            groups[-1].append(int(index))
        else:
            groups.append([int(index)])
    group_of = [0] * len(radii_mm)
    for number, members in enumerate(groups):
        for member in members:
            group_of[member] = number
    return np.array([np.mean(radii_mm[members]) for members in groups]), tuple(group_of)


def evidence(working: Working, radii_mm: Floats, gap_mm: float) -> Evidence:
    """Maps of evidence for discs of the plate's radii.

    Parameters
    ----------
    working : the components on the search grid
    radii_mm : (vials,) inner radii
    gap_mm : smallest distance between the rims of two vials; the window reaches at most this far over the rim
    """
    sizes, size_of = sizes_of(radii_mm)
    shape = working.components.shape[1:]
    spectra = np.fft.rfft2(working.components)
    energy = np.fft.rfft2(np.sum(working.components**2, axis=0))
    y = (np.fft.fftfreq(shape[0]) * shape[0] * working.pixel_mm[0])[:, None]
    x = (np.fft.fftfreq(shape[1]) * shape[1] * working.pixel_mm[1])[None, :]
    distance = np.hypot(y, x)
    pixel = float(np.mean(working.pixel_mm))
    maps = np.empty((len(sizes), *shape), dtype=np.float32)
    inside = _inside(working)
    for number, radius in enumerate(sizes):
        reach = radius + float(np.clip(gap_mm, 0.28 * radius, 0.45 * radius))
        window = np.clip((reach - distance) / pixel + 0.5, 0, 1)
        total = window.sum()
        parts = _profiles(distance, radius, pixel, working.transfer, window)
        sums = np.fft.irfft2(spectra * np.conj(np.fft.rfft2(window.astype(np.float32))), s=shape)
        power = np.fft.irfft2(energy * np.conj(np.fft.rfft2(window.astype(np.float32))), s=shape)
        variance = np.maximum(power - np.sum(sums**2, axis=0) / total, 0)
        explained = np.zeros(shape, dtype=np.float32)
        for part in parts:
            found = np.fft.irfft2(spectra * np.conj(np.fft.rfft2(part.astype(np.float32))), s=shape)
            explained += np.sum(found**2, axis=0)
        floor = 0.3 * total * working.noise * len(spectra)
        maps[number] = inside * explained / (variance + floor)
    return Evidence(np.clip(maps, 0, 1), size_of, working)


def _profiles(distance: Floats, radius: float, pixel: float, transfer: Pixels, window: Floats) -> list[Floats]:
    """What a vial may add to its surroundings: its filling, and its wall (a thin ring); weighted, orthonormal."""
    filling = np.clip((radius - distance) / pixel + 0.5, 0, 1)
    wall = np.clip((radius + _WALL_MM - distance) / pixel + 0.5, 0, 1) - filling
    found: list[Floats] = []
    made: list[Floats] = []
    for profile in (filling, wall):
        seen = np.fft.irfft2(np.fft.rfft2(profile) * transfer, s=distance.shape)
        seen -= (window * seen).sum() / window.sum()
        for other in found:
            seen -= (window * seen * other).sum() * other
        norm = float(np.sqrt((window * seen**2).sum()))
        found.append(seen / norm)
        made.append(window * found[-1])
    return made


def _inside(working: Working) -> Pixels:
    """1 where a pixel lies within the image, 0 in the padding."""
    masks = []
    for size, pad, step in zip(working.components.shape[1:], working.pad, working.step, strict=True):
        at = np.arange(size) / step
        masks.append((at >= pad - 0.5) & (at <= size / step - pad + 0.5))
    return np.asarray(masks[0][:, None] & masks[1][None, :], dtype=np.float32)
