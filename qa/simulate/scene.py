"""A scan as images: vials, bubbles and fill in k-space, coil fields, noise."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from qa.errors import VialbookError
from qa.simulate import sequences
from qa.simulate.kspace import discs, noise, window
from qa.simulate.pulses import profiles
from qa.simulate.truth import RunTruth, VialRecord
from qa.site.plate import Plate
from qa.site.recipe import Scan
from qa.words import Floats

Frames = NDArray[np.complex128]
Part = Literal["magnitude", "real", "imaginary"]


@dataclass(frozen=True, slots=True, eq=False)
class Layout:
    """The plate laid into the image: every vial's place, the coil fields, and the discs as imaged."""

    rows: Floats  # (vials,), fractional voxels
    columns: Floats
    spacing_mm: float
    transmit: Floats  # (matrix, matrix), true over nominal flip angle
    receive: Floats  # (matrix, matrix)
    shapes: Floats  # (vials, matrix, matrix), without bubbles and absent vials
    fill: Floats | None  # (matrix, matrix)


def lay(plate: Plate, truth: RunTruth) -> Layout:
    """Place a plate in an image."""
    angle = np.deg2rad(truth.rotation_deg)
    cos, sin = np.cos(angle), np.sin(angle)
    mirror = -1.0 if truth.flipped else 1.0
    scale = truth.scanner.gradient_scale
    weight = window(truth.matrix, truth.scanner.filtering, truth.sampled)

    def to_image(x: Floats, y: Floats) -> tuple[Floats, Floats]:
        across = scale * (mirror * x * cos - y * sin) + truth.shift_mm[0]
        up = scale * (mirror * x * sin + y * cos) + truth.shift_mm[1]
        return across, up

    def image(x: list[float], y: list[float], radius: list[float]) -> Floats:
        across, up = to_image(np.array(x), np.array(y))
        return discs(
            across,
            up,
            scale * np.array(radius),
            matrix=truth.matrix,
            field_of_view_mm=truth.field_of_view_mm,
            weight=weight,
        )

    spacing = truth.field_of_view_mm / truth.matrix
    middle = (truth.matrix - 1) / 2
    shapes = image([v.x_mm for v in plate.vials], [v.y_mm for v in plate.vials], [v.radius_mm for v in plate.vials])
    across, up = to_image(np.array([v.x_mm for v in plate.vials]), np.array([v.y_mm for v in plate.vials]))
    fill = None
    around = truth.surroundings
    if around is not None:
        walls = image(
            [v.x_mm for v in plate.vials],
            [v.y_mm for v in plate.vials],
            [0.0 if truth.vial(v.label).absent else v.radius_mm + around.wall_mm for v in plate.vials],
        )
        fill = image([0.0], [0.0], [around.radius_mm])[0] - walls.sum(axis=0)
    for index, vial in enumerate(plate.vials):
        inside = truth.vial(vial.label)
        if inside.absent:
            shapes[index] = 0.0
        elif inside.bubbles:
            holes = image(
                [vial.x_mm + b.dx_mm for b in inside.bubbles],
                [vial.y_mm + b.dy_mm for b in inside.bubbles],
                [b.radius_mm for b in inside.bubbles],
            )
            shapes[index] -= holes.sum(axis=0)
    if truth.empty:
        shapes[:] = 0.0
        fill = None
    grid = (np.arange(truth.matrix) - middle) * spacing / 100
    x, y = grid[None, :], -grid[:, None]
    scanner = truth.scanner

    def coil(bow: float, tilt: tuple[float, float]) -> Floats:
        return np.asarray(1 + bow * (x**2 + y**2) + tilt[0] * x + tilt[1] * y)

    return Layout(
        rows=middle - up / spacing,
        columns=middle + across / spacing,
        spacing_mm=spacing,
        transmit=scanner.transmit_level * coil(scanner.transmit_bow, scanner.transmit_tilt),
        receive=np.maximum(coil(scanner.receive_bow, scanner.receive_tilt), 0.05),
        shapes=shapes,
        fill=fill,
    )


def records(plate: Plate, truth: RunTruth, layout: Layout) -> tuple[VialRecord, ...]:
    """The truth per vial of a run."""
    out = []
    for vial, row, column in zip(plate.vials, layout.rows, layout.columns, strict=True):
        inside = truth.vial(vial.label)
        t1, t2 = inside.at(truth.celsius)
        near = (int(np.clip(round(row), 0, truth.matrix - 1)), int(np.clip(round(column), 0, truth.matrix - 1)))
        out.append(
            VialRecord(
                label=vial.label,
                t1_ms=t1 * truth.t1_factor,
                t2_ms=t2 * truth.t2_factor,
                row=float(row),
                column=float(column),
                absent=inside.absent or truth.empty,
                flip_factor=float(layout.transmit[near]),
            )
        )
    return tuple(out)


def times_of(scan: Scan, truth: RunTruth) -> Floats:
    """The TIs or TEs really acquired, ms; their order is the recipe's."""
    wanted = scan.ti_ms if scan.method in ("inversion-recovery", "saturation-recovery") else scan.te_ms
    skipped = truth.skipped.get(scan.name, ())
    return np.array([time for time in wanted if not any(abs(time - gone) < 1e-6 for gone in skipped)])


def repeat_of(scan: Scan, truth: RunTruth) -> float:
    """The TR really used, ms."""
    return truth.tr_ms.get(scan.name, scan.tr_ms if scan.tr_ms is not None else 5000.0)


def signals(scan: Scan, truth: RunTruth, t1_ms: Floats, t2_ms: Floats, flip: Floats) -> Floats:
    """Signed signals at the echo, ``flip.shape + (times,)``, for the scan as it was really run."""
    times, tr_ms = times_of(scan, truth), repeat_of(scan, truth)
    scanner = truth.scanner
    slices = profiles(scanner.pulses, scanner.refocusing_deg)
    te_ms = truth.inversion_te_ms
    t1_ms, t2_ms = np.broadcast_to(t1_ms, flip.shape), np.broadcast_to(t2_ms, flip.shape)
    if scan.method == "inversion-recovery":
        return sequences.inversion_recovery(
            t1_ms, t2_ms, flip, times, te_ms=te_ms, tr_ms=tr_ms, profiles=slices, inversion=scanner.inversion
        )
    if scan.method == "saturation-recovery":
        return sequences.saturation_recovery(t1_ms, t2_ms, flip, times, te_ms=te_ms, profiles=slices)
    if scan.method == "spin-echo-multi-te":
        return sequences.spin_echoes(t1_ms, t2_ms, flip, times, tr_ms=tr_ms, profiles=slices)
    wanted = np.array(scan.te_ms)
    spacing = float(wanted[0])
    echoes = np.rint(wanted / spacing).astype(int)
    if np.any(np.abs(wanted - spacing * echoes) > 1e-3 * spacing):
        what = f"the echo times of scan '{scan.name}' are not multiples of the first, {spacing:g} ms"
        raise VialbookError(what, remedy="An echo train has evenly spaced echoes; change te_ms in the recipe.")
    train = sequences.spin_echo_train(t1_ms, t2_ms, flip, spacing, int(echoes.max()), tr_ms=tr_ms, profiles=slices)
    return np.asarray(train[..., np.rint(times / spacing).astype(int) - 1])


def images(scan: Scan, truth: RunTruth, plate: Plate, layout: Layout, rng: np.random.Generator) -> Frames:
    """Complex frames of one scan, (times, matrix, matrix), noise included; phase corrected.

    A fully relaxed vial at TE = 0 and of a full slice has height 1 before receive shading.

    The signal's dependence on the local flip angle is followed inside each vial by a parabola through three
    flip factors. Coil fields are multiplied in after the k-space window: they vary over centimetres.
    """
    times = times_of(scan, truth)
    clean = np.zeros((len(times), truth.matrix, truth.matrix))
    values = records(plate, truth, layout)
    t1 = np.array([value.t1_ms for value in values])[:, None]
    t2 = np.array([value.t2_ms for value in values])[:, None]
    if not truth.empty:
        middle = np.array([value.flip_factor for value in values])
        reach = 0.02
        nodes = middle[:, None] + reach * np.array([-1.0, 0.0, 1.0])
        at = signals(scan, truth, t1, t2, nodes)  # (vials, 3, times)
        at *= np.array([truth.vial(v.label).density for v in plate.vials])[:, None, None]
        bend = np.stack([at[:, 1], (at[:, 2] - at[:, 0]) / 2, (at[:, 2] + at[:, 0]) / 2 - at[:, 1]], axis=1)
        for index in range(len(values)):
            off = (layout.transmit - middle[index]) / reach
            base = np.stack([layout.shapes[index] * np.clip(off, -10, 10) ** power for power in range(3)])
            clean += np.tensordot(bend[index], base, axes=(0, 0))
        if layout.fill is not None and truth.surroundings is not None:
            around = truth.surroundings
            levels = np.linspace(layout.transmit.min(), layout.transmit.max(), 5)
            at = around.density * signals(scan, truth, np.array(around.t1_ms), np.array(around.t2_ms), levels)
            for frame in range(len(times)):
                clean[frame] += layout.fill * np.interp(layout.transmit, levels, at[:, frame])
    clean *= layout.receive
    weight = window(truth.matrix, truth.scanner.filtering, truth.sampled)
    return np.asarray(clean + noise(clean.shape, 1.0 / truth.scanner.snr, weight, rng))


def parts(frames: Frames, truth: RunTruth) -> dict[Part, Floats]:
    """The images that are written: magnitude, real part, or both parts under a phase that varies over the image."""
    if truth.written == "magnitude":
        return {"magnitude": np.abs(frames)}
    if truth.written == "real":
        return {"real": frames.real}
    turn = np.linspace(-1.0, 1.0, truth.matrix)
    turned = frames * np.exp(1j * (0.7 + 0.9 * turn[None, :] - 0.6 * turn[:, None]))
    return {"real": turned.real, "imaginary": turned.imag}
