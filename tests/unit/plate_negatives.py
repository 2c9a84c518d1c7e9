"""Images in which the plate that is asked for cannot be told: each has to be refused, whatever the seed."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from plate_images import ASYMMETRIC, Scene, paint, pinwheel, plate_of, still

from qa.site.plate import Plate

FRAMES = 6


@dataclass
class Negative:
    """Images and a plate that is not to be found in them."""

    frames: np.ndarray
    spacing_mm: tuple[float, float]
    plate: Plate


def any_plate(rng: np.random.Generator) -> Plate:
    """One of the invented designs."""
    return ASYMMETRIC[str(rng.choice(list(ASYMMETRIC)))]()


def scene_of(plate: Plate, rng: np.random.Generator, matrix: int = 96, fov_mm: float = 200.0) -> Scene:
    """A plate lying anywhere, in air or water, every vial with a course of its own."""
    spacing = (fov_mm / matrix, fov_mm / matrix)
    signals = np.exp(-np.arange(FRAMES) * rng.uniform(0.05, 0.8, (len(plate.vials), 1)))
    filled = np.exp(-0.02 * np.arange(FRAMES)) if rng.random() < 0.5 else None
    lie = still((matrix, matrix), float(rng.uniform(-180, 180)), bool(rng.random() < 0.5), 1.0, (0.0, 0.0))
    return Scene(
        plate, lie, (matrix, matrix), spacing, signals, around=filled, container_mm=0.46 * fov_mm,
        sigma=float(rng.uniform(0.01, 0.05)), shading=(0.3, float(rng.uniform(0, 6.3)), 0.1),
    )  # fmt: skip


def _asked(scene: Scene, rng: np.random.Generator, plate: Plate) -> Negative:
    return Negative(paint(scene, rng), scene.spacing_mm, plate)


def noise_only(rng: np.random.Generator) -> Negative:
    """Nothing on the table."""
    frames = np.hypot(*rng.standard_normal((2, FRAMES, 96, 96))).astype(np.float32)
    return Negative(frames, (2.0, 2.0), any_plate(rng))


def smooth_noise(rng: np.random.Generator) -> Negative:
    """Blobs of about the size of vials, without order."""
    white = np.fft.fft2(rng.standard_normal((FRAMES, 96, 96)))
    k = np.hypot(np.fft.fftfreq(96)[:, None], np.fft.fftfreq(96)[None, :])
    frames = np.fft.ifft2(white * np.exp(-((k * 12.0) ** 2))).real
    return Negative(np.abs(frames / frames.std()).astype(np.float32), (2.0, 2.0), any_plate(rng))


def water_only(rng: np.random.Generator) -> Negative:
    """The trough without the plate."""
    plate = any_plate(rng)
    scene = scene_of(plate, rng)
    filled = np.exp(-0.02 * np.arange(FRAMES))
    return _asked(replace(scene, around=filled, gone=tuple(range(len(plate.vials)))), rng, plate)


def another_plate(rng: np.random.Generator) -> Negative:
    """A plate of another design."""
    names = rng.permutation(list(ASYMMETRIC))
    return _asked(scene_of(ASYMMETRIC[str(names[0])](), rng), rng, ASYMMETRIC[str(names[1])]())


def strewn_discs(rng: np.random.Generator) -> Negative:
    """As many vials as the plate has, somewhere else."""
    plate = any_plate(rng)
    points: list[complex] = []
    while len(points) < len(plate.vials):
        z = complex(*rng.uniform(-72, 72, 2))
        if abs(z) < 76 and all(abs(z - p) > 20 for p in points):
            points.append(z)
        elif rng.random() < 0.002:
            points.clear()
    other = plate_of("strewn", [(p.real, p.imag) for p in points], [v.radius_mm for v in plate.vials])
    return _asked(scene_of(other, rng), rng, plate)


def lattice(rng: np.random.Generator) -> Negative:
    """A regular grid of vials, wide enough that most places of the plate have a vial near."""
    plate = any_plate(rng)
    pitch = float(rng.uniform(20, 26))
    steps = np.arange(-3, 4) * pitch
    points = [(x, y) for x in steps for y in steps if np.hypot(x, y) < 80]
    return _asked(scene_of(plate_of("lattice", points, 8.0), rng), rng, plate)


def wrong_size(rng: np.random.Generator) -> Negative:
    """The same design 10 to 15 % larger or smaller: another product, or pixels of the wrong size."""
    plate = any_plate(rng)
    by = float(rng.choice([rng.uniform(0.85, 0.9), rng.uniform(1.1, 1.15)]))
    other = plate_of("sized", [(v.x_mm * by, v.y_mm * by) for v in plate.vials], [v.radius_mm for v in plate.vials])
    return _asked(scene_of(other, rng), rng, plate)


def symmetric(rng: np.random.Generator) -> Negative:
    """The plate is there, but turned by half a turn it looks the same."""
    plate = pinwheel()
    return _asked(scene_of(plate, rng), rng, plate)


def symmetric_left(rng: np.random.Generator) -> Negative:
    """The only vial that breaks the symmetry is the one that is not there."""
    base = pinwheel()
    points = [(v.x_mm, v.y_mm) for v in base.vials] + [(2.0, 62.0)]
    plate = plate_of("keyed pinwheel", points, 8.5)
    return _asked(replace(scene_of(plate, rng), gone=(len(points) - 1,)), rng, plate)


def many_gone(rng: np.random.Generator) -> Negative:
    """More than half of the vials are not there."""
    plate = any_plate(rng)
    count = len(plate.vials)
    gone = tuple(int(k) for k in rng.choice(count, int(0.6 * count) + 1, replace=False))
    return _asked(replace(scene_of(plate, rng), gone=gone), rng, plate)


def out_of_view(rng: np.random.Generator) -> Negative:
    """Most of the plate lies outside the image."""
    plate = any_plate(rng)
    scene = scene_of(plate, rng)
    way = rng.uniform(0, 2 * np.pi)
    shift = (50 * np.sin(way) - 48.0, 50 * np.cos(way) - 48.0)  # the plate's centre lies just outside what is kept
    lie = still((192, 192), float(rng.uniform(-180, 180)), bool(rng.random() < 0.5), 1.0, shift)
    frames = paint(replace(scene, placement=lie, around=None, shape=(192, 192)), rng)
    return Negative(frames[:, :96, :96], scene.spacing_mm, plate)


NEGATIVES: dict[str, Callable[[np.random.Generator], Negative]] = {
    function.__name__: function
    for function in (
        noise_only,
        smooth_noise,
        water_only,
        another_plate,
        strewn_discs,
        lattice,
        wrong_size,
        symmetric,
        symmetric_left,
        many_gone,
        out_of_view,
    )
}
