"""The batched map of T1 against a loop of scipy.optimize.curve_fit in its fastest form, on the same voxels.

    OMP_NUM_THREADS=1 python tests/bench/fit_speed.py [--voxels 20000] [--loop 1500] [--noise 0.005]

The loop: unbounded Levenberg-Marquardt, the analytic Jacobian, a start from a coarse table of plain floats, and both
signs that the smallest magnitude may have, as a loop has to try them. Printed: voxels per second of either, their
ratio (at least 50 is promised, 200 hoped for), and how far the answers differ. One core. Then the time of vial fits.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np
from scipy.optimize import curve_fit

sys.path.insert(0, str(Path(__file__).parents[1] / "unit"))
from fit_signals import T1_MS, T2_MS, X_MM, Y_MM, inversion, isochromat_train, magnitudes, signals_of, slice_angles

from qa.fit import METHODS

TI_MS = np.array([35.0, 80.0, 150.0, 270.0, 450.0, 700.0, 1100.0, 1700.0, 2500.0, 3600.0])


def curve(t: np.ndarray, t1: float, a: float, b: float) -> np.ndarray:
    """What the loop fits."""
    return a + b * np.exp(-t / t1)


def jacobian(t: np.ndarray, t1: float, a: float, b: float) -> np.ndarray:
    """Its derivatives (m, 3)."""
    decay = np.exp(-t / t1)
    found = np.empty((t.size, 3))
    found[:, 0] = b * decay * t / (t1 * t1)
    found[:, 1] = 1.0
    found[:, 2] = decay
    return found


def loop(values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """T1 and residual sum of squares of each row, one curve_fit after the other."""
    t1, rss = np.empty(len(values)), np.empty(len(values))
    for row, magnitude in enumerate(values):
        least = int(magnitude.argmin())
        null, last = float(TI_MS[least]), float(magnitude[-1])
        best = np.inf
        for flips in (least, least + 1):
            signed = magnitude.copy()
            signed[:flips] *= -1.0
            start = (null / 0.69, last, -last - float(magnitude[0]))
            try:
                popt, _ = curve_fit(
                    curve, TI_MS, signed, p0=start, jac=jacobian, method="lm", maxfev=400, check_finite=False
                )
            except RuntimeError:
                continue
            residual = signed - curve(TI_MS, *popt)
            power = float(residual @ residual)
            if power < best:
                best, t1[row], rss[row] = power, popt[0], power
        if not np.isfinite(best):
            t1[row], rss[row] = np.nan, np.inf
    return t1, rss


def residual_of(values: np.ndarray, t1: np.ndarray) -> np.ndarray:
    """The least residual sum of squares (n,) at a given T1 over every place of the sign change."""
    decay = np.exp(-TI_MS / t1[:, None])
    centred = decay - decay.mean(axis=1, keepdims=True)
    best = np.full(len(values), np.inf)
    for flips in range(len(TI_MS) + 1):
        signed = np.where(np.arange(len(TI_MS)) < flips, -values, values)
        signed = signed - signed.mean(axis=1, keepdims=True)
        along = np.einsum("rm,rm->r", centred, signed) ** 2 / np.einsum("rm,rm->r", centred, centred)
        best = np.minimum(best, np.einsum("rm,rm->r", signed, signed) - along)
    return best


def main() -> None:
    """Time both on the same voxels and print the comparison."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--voxels", type=int, default=20_000)
    parser.add_argument("--loop", type=int, default=1500, help="how many of them the loop does")
    parser.add_argument("--noise", type=float, default=0.005, help="of a channel, over the fully recovered signal")
    options = parser.parse_args()
    rng = np.random.default_rng(0)
    truth = np.exp(rng.uniform(np.log(120.0), np.log(2300.0), options.voxels))
    values = magnitudes(inversion(truth, TI_MS), options.noise, 1, 1)
    method = METHODS["inversion-recovery"]
    signals = signals_of(values, TI_MS, float("nan"))
    floored = signals_of(values, TI_MS, options.noise)
    nothing, owner = method.fit(signals_of(values[:2], TI_MS, float("nan"))), np.zeros(options.voxels, int)

    def timed(work, repeats: int = 5) -> tuple[float, object]:
        times = []
        for _ in range(repeats):
            start = time.perf_counter()
            result = work()
            times.append(time.perf_counter() - start)
        return min(times), result

    batch_s, batch = timed(lambda: method.map(signals, nothing, owner))
    floor_s, _ = timed(lambda: method.map(floored, nothing, owner))
    part = values[: options.loop]
    loop_s, (looped, loop_rss) = timed(lambda: loop(part), 2)
    batch_rate, floor_rate, loop_rate = options.voxels / batch_s, options.voxels / floor_s, options.loop / loop_s
    print(f"loop of curve_fit           {loop_rate:12.0f} voxels/s")
    print(f"batched, same model         {batch_rate:12.0f} voxels/s   ratio {batch_rate / loop_rate:7.0f}")
    print(f"batched, noise floor fitted {floor_rate:12.0f} voxels/s   ratio {floor_rate / loop_rate:7.0f}")
    ours = batch[: options.loop]
    good = np.isfinite(ours) & np.isfinite(looped)
    apart = np.abs(ours[good] / looped[good] - 1.0)
    lower = residual_of(part[good], ours[good]) <= loop_rss[good] * (1.0 + 1e-7)
    print(
        f"both gave a number: {good.sum()} of {options.loop}; within 0.1 %: {100 * np.mean(apart <= 1e-3):.2f} %; "
        f"within 0.1 % or a lower residual: {100 * np.mean((apart <= 1e-3) | lower):.2f} %"
    )
    print(f"residual no higher than the loop's: {100 * np.mean(lower):.2f} %")
    for echoes in (16, 32):
        print(f"vial fit of a train, 12 vials x {echoes} echoes: {1e3 * timed(vial_fit(echoes), 5)[0]:.0f} ms")


def vial_fit(echoes: int):
    """A fit of twelve vials' trains, ready to be timed."""
    pick = np.array([0, 1, 2, 3, 4, 5, 6, 7, 2, 3, 4, 5])
    shift = 1.0 + 0.05 * np.arange(12) / 12
    angles, weight = slice_angles()
    level = 0.96 + 0.03 * X_MM[pick] / 100 - 0.05 * (X_MM[pick] ** 2 + Y_MM[pick] ** 2) / 1e4
    clean = np.array(
        [
            weight @ isochromat_train(b * angles, 10.0, t1, t2, echoes)[0]
            for b, t1, t2 in zip(level, T1_MS[pick] * shift, T2_MS[pick] * shift, strict=True)
        ]
    )
    values = magnitudes(clean / clean.max(), 0.008, 40, 3)
    known = {"t1_ms": T1_MS[pick] * shift, "u_t1_ms": 0.005 * T1_MS[pick], "x_mm": X_MM[pick], "y_mm": Y_MM[pick]}
    signals = signals_of(values, 10.0 * np.arange(1, echoes + 1), 0.008, 40, **known, tr_ms=3000.0)
    method = METHODS["spin-echo-train"]
    method.fit(signals)
    return lambda: method.fit(signals)


if __name__ == "__main__":
    main()
