"""Paints images of plates for the tests of the locate room: k-space of discs, so point spread and ringing are real.

The Fourier transform of a disc of radius a is ``a * J1(2 pi a f) / f`` (Bracewell, The Fourier Transform and its
Applications, chapter on two dimensions). Plates here are invented.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.special import j1

from qa.locate.placement import Placement
from qa.site.plate import Plate, Vial


def plate_of(name: str, points: list[tuple[float, float]], radius_mm: float | list[float]) -> Plate:
    """A plate with vials labelled 1, 2, … at these points."""
    radii = radius_mm if isinstance(radius_mm, list) else [radius_mm] * len(points)
    vials = tuple(
        Vial(label=str(k + 1), x_mm=x, y_mm=y, radius_mm=r)
        for k, ((x, y), r) in enumerate(zip(points, radii, strict=True))
    )
    return Plate(name=name, vials=vials)


def crescent() -> Plate:
    """Twelve vials: an outer arc that does not close, and an inner group off the centre."""
    arc = [(66 * np.cos(np.deg2rad(a)), 66 * np.sin(np.deg2rad(a))) for a in (10, 42, 74, 106, 150, 190, 228, 268)]
    return plate_of("crescent", [*arc, (22, 14), (-14, 30), (-24, -20), (30, -38)], 9.0)


def terrace() -> Plate:
    """Fourteen vials in rows of unequal length and pitch."""
    rows = [(60, (-48, -20, 8, 36)), (30, (-60, -30, 24)), (0, (-38, 2, 54)), (-32, (-56, -14, 20)), (-60, (-4,))]
    return plate_of("terrace", [(x, y) for y, line in rows for x in line], 8.0)


def thicket() -> Plate:
    """Sixteen vials of three sizes, strewn."""
    points = [(-62, 22), (-40, 50), (-8, 62), (26, 56), (54, 34), (66, 4), (58, -28), (30, -52), (0, -64), (-34, -54)]
    points += [(-60, -14), (-32, 14), (-2, 26), (28, 16), (16, -18), (-22, -22)]
    radii = [6.0, 8.5, 6.0, 8.5, 8.5, 6.0, 8.5, 6.0, 11.0, 8.5, 8.5, 11.0, 6.0, 8.5, 11.0, 6.0]
    return plate_of("thicket", [(float(x), float(y)) for x, y in points], radii)


def pinwheel() -> Plate:
    """Twelve vials on two rings that turn onto themselves by 180 degrees: no picture can tell their labels."""
    outer = [(60 * np.cos(np.deg2rad(a)), 60 * np.sin(np.deg2rad(a))) for a in (0, 35, 80, 130, 180, 215, 260, 310)]
    return plate_of("pinwheel", [*outer, (24, 10), (-24, -10), (-8, 28), (8, -28)], 8.5)


ASYMMETRIC = {"crescent": crescent, "terrace": terrace, "thicket": thicket}


@dataclass
class Scene:
    """What to paint. Truth is `placement`; signals are relative to 1 for water at full recovery."""

    plate: Plate
    placement: Placement
    shape: tuple[int, int]
    spacing_mm: tuple[float, float]
    vial_signals: np.ndarray  # (vials, frames)
    around: np.ndarray | None = None  # (frames,) signal of the filling; None: air
    container_mm: float = 0.0  # radius of the round container; 0: the filling has no outline
    container_at_mm: tuple[float, float] = (0.0, 0.0)  # its centre from the plate's
    wall_mm: float = 1.0
    gone: tuple[int, ...] = ()  # vials that are not there
    bubbles: tuple[tuple[int, float, float, float], ...] = ()  # vial, x and y from its centre (mm), radius (mm)
    shading: tuple[float, float, float] = (0.0, 0.0, 0.0)  # depth 0..0.6, direction (rad), curvature
    sigma: np.ndarray | float = 0.0  # noise of each frame
    scale_of_frame: np.ndarray | float = 1.0
    offsets_mm: np.ndarray | None = field(default=None)  # (vials, 2) build error of the plate


def still(shape: tuple[int, int], rotation_deg: float = 0.0, flipped: bool = False, scale: float = 1.0,
          shift: tuple[float, float] = (0.0, 0.0)) -> Placement:  # fmt: skip
    """A true placement: centre of the image plus shift (rows, columns)."""
    row, column = (shape[0] - 1) / 2 + shift[0], (shape[1] - 1) / 2 + shift[1]
    return Placement(row, column, rotation_deg, flipped, scale, 0.0, 1.0, (), ())


def _disc(ky: np.ndarray, kx: np.ndarray, radius: float, y: float, x: float) -> np.ndarray:
    f = np.hypot(ky, kx)
    safe = np.where(f > 0, f, 1.0)
    body = np.where(f > 0, radius * j1(2 * np.pi * radius * safe) / safe, np.pi * radius**2)
    return body * np.exp(-2j * np.pi * (ky * y + kx * x))


def paint(scene: Scene, rng: np.random.Generator) -> np.ndarray:
    """Magnitude frames (frames, rows, columns) float32, with Rician noise."""
    rows, columns = scene.shape
    sy, sx = scene.spacing_mm
    ky = (np.fft.fftfreq(rows) / sy)[:, None]
    kx = np.fft.rfftfreq(columns, sx)[None, :]
    centre_rows, centre_columns = scene.placement.vial_centres(scene.plate, scene.spacing_mm)
    if scene.offsets_mm is not None:
        centre_rows = centre_rows + scene.offsets_mm[:, 1] / sy
        centre_columns = centre_columns + scene.offsets_mm[:, 0] / sx
    frames = scene.vial_signals.shape[1]
    filled = np.zeros(frames) if scene.around is None else np.asarray(scene.around, dtype=float)
    images, amounts = [], []

    def add(radius: float, y: float, x: float, amount: np.ndarray) -> None:
        k = _disc(ky, kx, radius, y, x)
        if rows % 2 == 0:
            k[rows // 2] = 0
        images.append(np.fft.irfft2(k, s=scene.shape) / (sy * sx))
        amounts.append(amount)

    if scene.around is not None and scene.container_mm > 0:
        y, x = scene.placement.to_image(np.array(0.0), np.array(0.0), scene.spacing_mm)
        add(
            scene.container_mm,
            float(y) * sy + scene.container_at_mm[1],
            float(x) * sx + scene.container_at_mm[0],
            filled,
        )
    elif scene.around is not None:
        images.append(np.ones(scene.shape))
        amounts.append(filled)
    for k, vial in enumerate(scene.plate.vials):
        if k in scene.gone:
            continue
        y, x, radius = centre_rows[k] * sy, centre_columns[k] * sx, vial.radius_mm * scene.placement.scale
        if scene.wall_mm > 0 and scene.around is not None:
            add(radius + scene.wall_mm, y, x, -filled)
            add(radius, y, x, scene.vial_signals[k])
        else:
            add(radius, y, x, scene.vial_signals[k] - filled)
        for of, bx, by, br in scene.bubbles:
            if of == k:
                add(br, y - by, x + bx, -scene.vial_signals[k])
    stack = np.tensordot(np.array(amounts).T, np.array(images), axes=1)
    depth, way, bend = scene.shading
    gy, gx = np.meshgrid(np.linspace(-1, 1, rows), np.linspace(-1, 1, columns), indexing="ij")
    slope = gx * np.cos(way) + gy * np.sin(way)
    stack = stack * np.clip(1 + 0.5 * depth * slope - bend * (gx**2 + gy**2), 0.05, None)
    sigma = np.broadcast_to(np.asarray(scene.sigma, dtype=float), (frames,))[:, None, None]
    noisy = np.hypot(stack + sigma * rng.standard_normal(stack.shape), sigma * rng.standard_normal(stack.shape))
    gain = np.broadcast_to(np.asarray(scene.scale_of_frame, dtype=float), (frames,))[:, None, None]
    return (gain * noisy).astype(np.float32)


def relaxation(t1_ms: np.ndarray, t2_ms: np.ndarray, ti_ms: np.ndarray, te_ms: np.ndarray) -> np.ndarray:
    """Signals (vials, frames): signed inversion recovery (TR 5000 ms), then an echo train."""
    recovery = 1 - 1.95 * np.exp(-ti_ms / t1_ms[:, None]) + np.exp(-5000 / t1_ms[:, None])
    return np.concatenate([recovery, np.exp(-te_ms / t2_ms[:, None])], axis=1)
