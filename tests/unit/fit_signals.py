"""Signals for the fit room's tests and benches: closed forms and rotations of their own, with noise as it really is."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from qa.fit import METHODS, Signals

TI_MS = np.array([35.0, 80.0, 150.0, 270.0, 450.0, 700.0, 1100.0, 1700.0, 2500.0, 3600.0])
TR_MS = 6000.0
SINGLE_TE_MS = np.array([10.0, 20.0, 40.0, 70.0, 110.0, 170.0, 260.0])
TRAIN_TE_MS = 11.0 * np.arange(1, 17)

# vials: T1, T2 in ms, place on the plate in mm
T1_MS = np.array([2300.0, 210.0, 1500.0, 600.0, 1080.0, 330.0, 1900.0, 450.0])
T2_MS = np.array([420.0, 21.0, 170.0, 43.0, 90.0, 31.0, 280.0, 140.0])
X_MM = np.array([45.0, 30.0, -5.0, -38.0, -44.0, -12.0, 24.0, 2.0])
Y_MM = np.array([10.0, 42.0, 48.0, 25.0, -16.0, -45.0, -34.0, 3.0])


def inversion(t1_ms: np.ndarray, times_ms: np.ndarray, efficiency: float = 0.96, tr_ms: float = TR_MS) -> np.ndarray:
    """Signed recovery (n, m) after an inversion of that efficiency in the steady state, final value 1."""
    t1 = np.asarray(t1_ms, float)[:, None]
    left = np.exp(-tr_ms / t1)
    return 1.0 - (1.0 + efficiency) / (1.0 + efficiency * left) * np.exp(-times_ms / t1)


def saturation(t1_ms: np.ndarray, times_ms: np.ndarray, left: float = 0.03) -> np.ndarray:
    """Recovery (n, m) from a saturation that leaves a little."""
    return 1.0 - (1.0 - left) * np.exp(-times_ms / np.asarray(t1_ms, float)[:, None])


def single_echoes(t1_ms: np.ndarray, t2_ms: np.ndarray, times_ms: np.ndarray, tr_ms: float) -> np.ndarray:
    """Spin echoes of 90 and 180 degrees (n, m), one repetition for each TE, followed through one repetition.

    Mz = 0 after the excitation, recovers for TE/2, is inverted, recovers until the next excitation.
    """
    t1, t2 = np.asarray(t1_ms, float)[:, None], np.asarray(t2_ms, float)[:, None]
    mz = -(1.0 - np.exp(-times_ms / 2.0 / t1))
    mz = 1.0 + (mz - 1.0) * np.exp(-(tr_ms - times_ms / 2.0) / t1)
    return mz * np.exp(-times_ms / t2)


def isochromat_train(
    angles_rad: np.ndarray, spacing_ms: float, t1_ms: float, t2_ms: float, echoes: int, start: tuple = (0, 1, 0)
) -> tuple[np.ndarray, np.ndarray]:
    """Echoes (pulse trains, echoes) and the mean longitudinal magnetisation at the last, by Bloch's rotations.

    Spins of every dephasing are carried one by one: rotated about y by each pulse, precessed and relaxed between them.
    The excited magnetisation lies along y, so that the train meets Carr, Purcell, Meiboom and Gill's condition.
    """
    spins = 4 * echoes + 8  # enough to integrate every order exactly
    phase = 2.0 * np.pi * (np.arange(spins) + 0.5) / spins
    half = np.exp(-spacing_ms / 2.0 / t1_ms), np.exp(-spacing_ms / 2.0 / t2_ms)
    found, along = [], []
    for angle in np.atleast_1d(angles_rad):
        x, y, z = (np.full(spins, float(value)) for value in start)
        amplitudes = []

        def free(x: np.ndarray, y: np.ndarray, z: np.ndarray) -> tuple[np.ndarray, ...]:
            turned = (x + 1j * y) * np.exp(1j * phase) * half[1]
            return turned.real, turned.imag, 1.0 + (z - 1.0) * half[0]

        for _ in range(echoes):
            x, y, z = free(x, y, z)
            x, z = x * np.cos(angle) + z * np.sin(angle), z * np.cos(angle) - x * np.sin(angle)
            x, y, z = free(x, y, z)
            amplitudes.append(y.mean())
        found.append(amplitudes)
        along.append(z.mean())
    return np.array(found), np.array(along)


def magnitudes(clean: np.ndarray, noise: float, voxels: int, seed: int) -> np.ndarray:
    """Averages (n, m) over `voxels` of magnitudes with Gaussian noise in both channels."""
    rng = np.random.default_rng(seed)
    shape = (clean.shape[0], voxels, clean.shape[1])
    real = clean[:, None] + noise * rng.standard_normal(shape)
    return np.hypot(real, noise * rng.standard_normal(shape)).mean(axis=1)


def signals_of(values: np.ndarray, times_ms: np.ndarray, noise: float, voxels: float = 1.0, **more: object) -> Signals:
    """Signals with the same number of voxels in each row; `more` are fields of Signals."""
    rest = {"signed": False, "tr_ms": TR_MS} | more
    return Signals(np.asarray(values), np.asarray(times_ms), noise=noise, voxels=np.full(len(values), voxels), **rest)


def example(method: str, noise: float = 0.004, voxels: int = 30, seed: int = 1) -> tuple[Signals, np.ndarray]:
    """A run of eight vials for a method of the table, and the relaxation times that are true."""
    if method == "inversion-recovery":
        values = magnitudes(inversion(T1_MS, TI_MS), noise, voxels, seed)
        return signals_of(values, TI_MS, noise, voxels), T1_MS
    if method == "saturation-recovery":
        values = magnitudes(saturation(T1_MS, TI_MS), noise, voxels, seed)
        return signals_of(values, TI_MS, noise, voxels), T1_MS
    known = {"t1_ms": T1_MS, "u_t1_ms": 0.005 * T1_MS, "x_mm": X_MM, "y_mm": Y_MM}
    if method == "spin-echo-multi-te":
        values = magnitudes(single_echoes(T1_MS, T2_MS, SINGLE_TE_MS, TR_MS), noise, voxels, seed)
        return signals_of(values, SINGLE_TE_MS, noise, voxels, **known), T2_MS
    values = magnitudes(example_trains(), noise, voxels, seed)
    return signals_of(values, TRAIN_TE_MS, noise, voxels, **known | {"tr_ms": float("nan")}), T2_MS


def slice_angles(points: int = 24) -> tuple[np.ndarray, np.ndarray]:
    """A slice like no pulse's: the refocusing angle falls off as a Fermi function, the signal as a cosine."""
    z = (np.arange(points) + 0.5) / points
    return np.pi / (1.0 + np.exp((z - 0.8) / 0.12)), np.cos(np.pi / 2.0 * z)


def example_trains(level: np.ndarray | None = None) -> np.ndarray:
    """Clean echoes (n, m) of the vials above, with that slice, by isochromats; fully recovered before each train."""
    if level is None:
        level = 0.98 + 0.03 * X_MM / 100.0 - 0.06 * (X_MM**2 + Y_MM**2) / 100.0**2
    angles, weight = slice_angles()
    spacing = float(TRAIN_TE_MS[0])
    rows = []
    for b, t1, t2 in zip(level, T1_MS, T2_MS, strict=True):
        rows.append(weight @ isochromat_train(b * angles, spacing, t1, t2, len(TRAIN_TE_MS))[0])
    rows = np.array(rows)
    return rows / rows.max()


@dataclass(frozen=True)
class Case:
    """One setting for the Cramér-Rao bound: the amplitude as a function of its parameters, the first a time in ms."""

    name: str
    method: str
    times_ms: np.ndarray
    truth: tuple[float, ...]
    amplitude: Callable[[np.ndarray], np.ndarray]
    noise: float
    signed: bool = False
    voxels: int = 20
    tr_ms: float = float("nan")

    def bound(self) -> float:
        """The smallest standard deviation of the first parameter, by numerical derivatives of the amplitude."""
        truth = np.array(self.truth)
        step = 1e-5 * truth
        jacobian = np.stack(
            [
                (self.amplitude(truth + h * e) - self.amplitude(truth - h * e)) / (2.0 * h)
                for h, e in zip(step, np.eye(len(truth)), strict=True)
            ]
        )
        return float(np.sqrt(np.linalg.inv(jacobian @ jacobian.T)[0, 0]) * self.noise / np.sqrt(self.voxels))


CASES = (
    *(
        Case(
            f"T1 {t1:g} ms, inversion, {'signed' if signed else 'magnitude'}",
            "inversion-recovery",
            TI_MS,
            (t1, 1.0, 1.93),
            lambda p: p[1] - p[2] * np.exp(-TI_MS / p[0]),
            0.01,
            signed,
        )
        for t1 in (250.0, 900.0, 2000.0)
        for signed in (False, True)
    ),
    Case(
        "T1 700 ms, saturation, magnitude",
        "saturation-recovery",
        TI_MS,
        (700.0, 1.0, 0.97),
        lambda p: p[1] - p[2] * np.exp(-TI_MS / p[0]),
        0.005,
    ),
    *(
        Case(
            f"T2 {t2:g} ms, separate echoes, magnitude",
            "spin-echo-multi-te",
            SINGLE_TE_MS,
            (t2, 1.0),
            lambda p: p[1] * np.exp(-SINGLE_TE_MS / p[0]),
            0.01,
        )
        for t2 in (60.0, 180.0)
    ),
)


def efficiency(case: Case, trials: int, seed: int) -> tuple[float, float, float]:
    """Scatter over the bound, bias over the scatter, and stated u over the scatter, from many noise trials."""
    clean = np.broadcast_to(case.amplitude(np.array(case.truth)), (trials, len(case.times_ms)))
    if case.signed:
        noise = case.noise / np.sqrt(case.voxels)
        values = clean + noise * np.random.default_rng(seed).standard_normal(clean.shape)
    else:
        values = magnitudes(clean, case.noise, case.voxels, seed)
    found = METHODS[case.method].fit(
        signals_of(values, case.times_ms, case.noise, case.voxels, signed=case.signed, tr_ms=case.tr_ms)
    )
    scatter = float(np.std(found.value_ms, ddof=1))
    bias = float(np.mean(found.value_ms)) - case.truth[0]
    return scatter / case.bound(), bias / scatter, float(np.median(found.u_ms)) / scatter
