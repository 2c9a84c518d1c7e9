"""Random placements of random plates, simulated runs, and images without the plate: what is found, refused, or wrong.

    python tests/bench/locate_trials.py [trials] [seed] [-v]

Prints mislabelled placements (must be 0), refusals, the rms error of the placements, and the time per run.

Ranges: any rotation, shift up to a few mm from the border, mirrored or not, scale error up to 2 %, shading up to 60 %,
air, water or gel around, container outline or none, walls 0 to 2 mm, matrices 64 to 512, voxels unequal by up to 1.5,
vials 5 to 30 of 6 to 15 mm, up to two missing, bubbles, vials built up to 0.3 mm off, noise of 1 to 12 % (Rician).
"""

from __future__ import annotations

import sys
import time
from collections import Counter
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "unit"))
from plate_images import ASYMMETRIC, Scene, paint, plate_of, relaxation
from plate_negatives import NEGATIVES

from qa.locate import NotLocated, locate
from qa.locate.placement import Placement
from qa.simulate.scene import images, lay
from qa.simulate.truth import Bubble, RunTruth, ScannerTruth, Surroundings, VialTruth
from qa.site.plate import Plate
from qa.site.recipe import Scan

TI_MS = np.array([35.0, 90.0, 180.0, 350.0, 650.0, 1100.0, 1800.0, 2700.0])
TE_MS = np.arange(1, 13) * 18.0
ANY = {"SeriesDescription": ".*"}
SCANS = (
    Scan(name="T1", quantity="T1", method="inversion-recovery", match=ANY, ti_ms=TI_MS, tr_ms=5000),
    Scan(name="T2", quantity="T2", method="spin-echo-train", match=ANY, te_ms=TE_MS, tr_ms=3000),
)  # fmt: skip


def random_plate(rng: np.random.Generator) -> Plate:
    """One of the invented designs, vials strewn at random, or a symmetric design, near or with one or two key vials."""
    kind = rng.choice(["named", "strewn", "near-symmetric", "keyed"], p=[0.35, 0.35, 0.15, 0.15])
    if kind == "named":
        return ASYMMETRIC[str(rng.choice(list(ASYMMETRIC)))]()
    if kind == "keyed":
        return keyed_plate(rng)
    count = int(rng.integers(5, 31)) if rng.random() < 0.5 else int(rng.integers(10, 17))
    radius = float(rng.uniform(6, 15 if count < 12 else 9 if count < 20 else 7))
    radii = np.full(count, radius)
    if rng.random() < 0.4:
        radii = rng.uniform(6, radius, count) if radius > 6.5 else radii
    points: list[complex] = []
    half_turn = kind == "near-symmetric"
    tries = 0
    while len(points) < count:
        tries += 1
        z = complex(*rng.uniform(-75, 75, 2))
        if tries > 4000:  # no room left: fewer vials
            break
        clear = [abs(z - p) > radii[k] + radii[len(points)] + 4 for k, p in enumerate(points)]
        if abs(z) > 78 or not all(clear) or (half_turn and abs(z) < radius + 3):
            continue
        points.append(z)
        if half_turn and len(points) < count:
            off = complex(*rng.normal(0, 1.5, 2)) if rng.random() < 0.6 else 0
            other = -z + off
            if all(abs(other - p) > radii[k] + radii[len(points)] + 2 for k, p in enumerate(points)):
                radii[len(points)] = radii[len(points) - 1]
                points.append(other)
    return plate_of(kind, [(p.real, p.imag) for p in points], [float(r) for r in radii[: len(points)]])


def keyed_plate(rng: np.random.Generator) -> Plate:
    """Vials in pairs, alike when turned by half a turn or seen from the other face, and one or two that break it."""
    radius, turned = float(rng.uniform(6, 11)), rng.random() < 0.5
    pairs, keys = int(rng.integers(3, 12)), int(rng.integers(1, 3))
    points: list[complex] = []
    for _ in range(4000):
        z = complex(*rng.uniform(-72, 72, 2))
        new = [z] if len(points) >= 2 * pairs else [z, -z if turned else z.conjugate()]
        apart = [abs(a - b) for a in new for b in points] + [abs(new[0] - z) for z in new[1:]]
        if abs(z) < 76 and all(gap > 2 * radius + 4 for gap in apart):
            points += new
        if len(points) == 2 * pairs + keys:
            break
    return plate_of("keyed", [(p.real, p.imag) for p in points], radius)


@dataclass
class Trial:
    scene: Scene
    frames: np.ndarray


def random_trial(rng: np.random.Generator, plate: Plate | None = None, size: int | None = None) -> Trial:
    """A scene within the ranges above."""
    plate = plate or random_plate(rng)
    vials = len(plate.vials)
    size = size or int(rng.choice([64, 96, 128, 192, 256, 512], p=[0.15, 0.15, 0.35, 0.15, 0.15, 0.05]))
    far = max(np.hypot(v.x_mm, v.y_mm) + v.radius_mm for v in plate.vials) * 1.02
    fov = float(rng.uniform(2 * far + 8, 2 * far + 90))
    stretch = float(rng.choice([1.0, rng.uniform(1, 1.5)]))
    shape = (size, int(size / stretch) if size > 64 else size)
    smallest = min(v.radius_mm for v in plate.vials)
    fov = min(fov, shape[1] * smallest / 1.5)
    fov = max(fov, 2 * far + 4)
    spacing = (fov / shape[0], fov / shape[1])
    room = 0.5 * fov - far - 2
    shift = rng.uniform(-room, room, 2) if room > 0 else np.zeros(2)
    truth = Placement(
        (shape[0] - 1) / 2 + shift[0] / spacing[0],
        (shape[1] - 1) / 2 + shift[1] / spacing[1],
        float(rng.uniform(-180, 180)),
        bool(rng.random() < 0.5),
        float(rng.uniform(0.98, 1.02)),
        0.0,
        1.0,
        (),
        (),
    )
    t1 = np.exp(rng.uniform(np.log(40), np.log(2600), vials))
    t2 = t1 * rng.uniform(0.05, 0.9, vials)
    if rng.random() < 0.3:  # a T2 plate: T1 alike
        t1, t2 = np.full(vials, 1200.0) * rng.uniform(0.95, 1.05, vials), np.exp(rng.uniform(2.5, 6, vials))
    around = [None, (2800.0, 1800.0), (1100.0, 90.0)][int(rng.integers(3))]
    count = int(rng.choice([1, 8, 20]))
    signals = np.abs(relaxation(t1, t2, TI_MS, TE_MS)) * rng.uniform(0.85, 1.0, (vials, 1))
    filled = None
    if around:
        filled = np.abs(relaxation(np.array([around[0]]), np.array([around[1]]), TI_MS, TE_MS))[0]
    pick = np.array([8]) if count == 1 else np.arange(8, 16) if count == 8 else np.arange(20)
    gone = tuple(int(k) for k in rng.choice(vials, int(rng.integers(0, 3)) if vials > 6 else 0, replace=False))
    bubbles = tuple(
        (int(k), *(float(u) for u in rng.uniform(-0.5, 0.5, 2) * plate.vials[k].radius_mm), float(rng.uniform(1.5, 4)))
        for k in rng.choice(vials, int(rng.integers(0, 3)), replace=False)
    )
    scene = Scene(
        plate,
        truth,
        shape,
        spacing,
        signals[:, pick],
        around=None if filled is None else filled[pick],
        container_mm=float(far + rng.uniform(4, 20)) if rng.random() < 0.7 else 0.0,
        container_at_mm=(float(rng.uniform(-2, 2)), float(rng.uniform(-2, 2))),
        wall_mm=float(rng.uniform(0, 2)),
        gone=gone,
        bubbles=bubbles,
        shading=(float(rng.uniform(0, 0.6)), float(rng.uniform(0, 6.3)), float(rng.uniform(0, 0.2))),
        sigma=float(np.exp(rng.uniform(np.log(0.01), np.log(0.12)))),
        scale_of_frame=np.where(np.arange(len(pick)) < 8, 1.0, float(np.exp(rng.uniform(-3, 7)))),
        offsets_mm=rng.normal(0, 0.15, (vials, 2)) if rng.random() < 0.5 else None,
    )
    return Trial(scene, paint(scene, rng))


def error_voxels(trial: Trial, found: Placement) -> tuple[float, float]:
    """rms and largest distance of the vials' places from truth: voxels, and share of the smallest radius."""
    scene = trial.scene
    there = np.array(found.vial_centres(scene.plate, scene.spacing_mm))
    truth = np.array(scene.placement.vial_centres(scene.plate, scene.spacing_mm))
    off = there - truth
    off_mm = np.hypot(off[0] * scene.spacing_mm[0], off[1] * scene.spacing_mm[1])
    return float(np.sqrt((off**2).sum(axis=0).mean())), float(
        off_mm.max() / min(v.radius_mm for v in scene.plate.vials)
    )


def placements(trials: int, seed: int, verbose: bool) -> int:
    """Random scenes; gives the number of mislabelled ones."""
    refused: Counter[str] = Counter()
    errors: dict[bool, list[float]] = {True: [], False: []}
    wrong = 0
    for number in range(trials):
        trial = random_trial(np.random.default_rng([seed, number]))
        found = locate(trial.frames, trial.scene.spacing_mm, trial.scene.plate)
        if isinstance(found, NotLocated):
            refused[f"{trial.scene.plate.name}: {found.code}"] += 1
            if verbose:
                print(number, describe(trial), found.code, found.reason)
            continue
        rms, worst = error_voxels(trial, found)
        if worst > 0.5:
            wrong += 1
            print(f"MISLABELLED trial {number}: {describe(trial)} confidence {found.confidence:.2f}")
        else:
            exact = trial.scene.offsets_mm is None
            errors[exact].append(rms)
            if exact and verbose and rms > 0.1:
                print(f"{number} error {rms:.2f} voxels: {describe(trial)}")
    print(f"random scenes: {trials}, mislabelled {wrong}, refused {sum(refused.values())} {dict(refused)}")
    for exact, values in errors.items():
        built = "built exactly" if exact else "vials built 0.15 mm off (1 sigma, each way)"
        print(
            f"rms placement error, plate {built}: {np.sqrt(np.mean(np.square(values))):.3f} voxels, "
            f"most {max(values):.3f}"
        )
    return wrong


def simulated(trials: int, seed: int) -> int:
    """Runs of the simulator (its own physics, coil fields and shading), as measured: through all scans at once."""
    wrong = refused = 0
    errors = []
    for number in range(trials):
        rng = np.random.default_rng([seed, 1, number])
        plate = ASYMMETRIC[str(rng.choice(list(ASYMMETRIC)))]()
        truth = random_truth(plate, rng)
        layout = lay(plate, truth)
        frames = np.concatenate([np.abs(images(scan, truth, plate, layout, rng)) for scan in SCANS])
        spacing = (layout.spacing_mm, layout.spacing_mm)
        found = locate(frames.astype(np.float32), spacing, plate)
        if isinstance(found, NotLocated):
            refused += 1
            continue
        rows, columns = found.vial_centres(plate, spacing)
        apart = np.hypot(rows - layout.rows, columns - layout.columns)
        if apart.max() * layout.spacing_mm > 0.5 * min(v.radius_mm for v in plate.vials):
            wrong += 1
            print(f"MISLABELLED simulated run {number} of {plate.name}, confidence {found.confidence:.2f}")
        else:
            errors.append(float(np.sqrt(np.mean(apart**2))))
    rms, most = float(np.sqrt(np.mean(np.square(errors)))), max(errors)
    print(f"simulated runs: {trials}, mislabelled {wrong}, refused {refused}")
    print(f"rms placement error of simulated runs: {rms:.3f} voxels, most {most:.3f}")
    return wrong


def random_truth(plate: Plate, rng: np.random.Generator) -> RunTruth:
    """A run as a site might scan it: any rotation, either face, up to two vials out, a bubble, imperfect pulses."""
    count = len(plate.vials)
    t1 = np.exp(rng.uniform(np.log(60), np.log(2400), count))
    vials = [
        VialTruth(v.label, float(t), float(t * rng.uniform(0.05, 0.6))) for v, t in zip(plate.vials, t1, strict=True)
    ]
    for k in rng.choice(count, int(rng.integers(0, 3)), replace=False):
        vials[int(k)] = replace(vials[int(k)], absent=True)
    for k in rng.choice(count, int(rng.integers(0, 2)), replace=False):
        hole = Bubble(float(rng.uniform(-3, 3)), float(rng.uniform(-3, 3)), float(rng.uniform(1.5, 3.5)))
        vials[int(k)] = replace(vials[int(k)], bubbles=(hole,))
    scanner = ScannerTruth(
        "any", 3.0, refocusing_deg=float(rng.uniform(130, 180)), transmit_level=float(rng.uniform(0.85, 1.1)),
        receive_bow=float(rng.uniform(-0.4, 0)), receive_tilt=tuple(rng.uniform(-0.25, 0.25, 2)),
        snr=float(rng.uniform(30, 200)), gradient_scale=float(rng.uniform(0.985, 1.015)),
        filtering=float(rng.choice([0.0, 0.46])),
    )  # fmt: skip
    return RunTruth(
        scanner, tuple(vials), datetime(2026, 1, 5, tzinfo=UTC), matrix=int(rng.choice([64, 96, 128])),
        field_of_view_mm=float(rng.uniform(190, 230)), shift_mm=tuple(rng.uniform(-8, 8, 2)),
        rotation_deg=float(rng.uniform(-180, 180)), flipped=bool(rng.random() < 0.5),
        surroundings=Surroundings(radius_mm=88.0) if rng.random() < 0.4 else None,
    )  # fmt: skip


def negatives(trials: int, seed: int) -> int:
    """Images in which the plate cannot be told; gives the number placed all the same."""
    wrong = 0
    for name, make in NEGATIVES.items():
        codes: Counter[str] = Counter()
        for number in range(trials):
            case = make(np.random.default_rng([seed, 2, number]))
            found = locate(case.frames, case.spacing_mm, case.plate)
            codes[found.code if isinstance(found, NotLocated) else "PLACED"] += 1
        wrong += codes["PLACED"]
        print(f"without the plate, {name}: {dict(codes)}")
    return wrong


def main() -> None:
    words = [word for word in sys.argv[1:] if word != "-v"]
    trials = int(words[0]) if words else 500
    seed = int(words[1]) if len(words) > 1 else 1
    wrong = placements(trials, seed, "-v" in sys.argv)
    wrong += simulated(max(1, trials // 2), seed)
    wrong += negatives(max(1, trials // 10), seed)
    for size in (64, 128, 256):
        spent = []
        for number in range(12):
            trial = random_trial(np.random.default_rng([seed, number, size]), ASYMMETRIC["terrace"](), size)
            start = time.perf_counter()
            locate(trial.frames, trial.scene.spacing_mm, trial.scene.plate)
            spent.append(1e3 * (time.perf_counter() - start))
        print(f"matrix {size}: median {np.median(spent):.0f} ms a run")
    print("nothing mislabelled" if not wrong else f"MISLABELLED OR PLACED WRONGLY: {wrong}")
    sys.exit(1 if wrong else 0)


def describe(trial: Trial) -> str:
    scene = trial.scene
    around = "air" if scene.around is None else f"filled (outline {scene.container_mm:.0f} mm)"
    return (
        f"{scene.plate.name}, {len(scene.plate.vials)} vials of {min(v.radius_mm for v in scene.plate.vials):.1f} mm, "
        f"{scene.shape[0]} x {scene.shape[1]}, {scene.spacing_mm[0]:.2f} mm, frames {len(trial.frames)}, {around}, "
        f"gone {len(scene.gone)}, bubbles {len(scene.bubbles)}, noise {float(np.max(scene.sigma)):.3f}"
    )


if __name__ == "__main__":
    main()
