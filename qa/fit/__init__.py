"""Fit room. Enters: signals (vials or voxels x samples), times, noise.
Leaves: estimates with covariance, residuals and states.
Knows nothing of DICOM, the database or plates.

One entry of `METHODS` per method that a recipe may name; each is a small object with `fit` (vial averages) and `map`
(voxels). `noise_of_regions` and `noise_of_background` say how large the noise is, `expected_magnitude` what it does to
a magnitude.
"""

from __future__ import annotations

from qa.fit.echo_train import EchoTrain
from qa.fit.estimate import Estimate, FitMethod, Signals, u_total_ms
from qa.fit.multi_echo import MultiEcho
from qa.fit.noise import expected_magnitude, noise_of_background, noise_of_regions
from qa.fit.recovery import Recovery

METHODS: dict[str, FitMethod] = {
    "inversion-recovery": Recovery("inversion-recovery", inverted=True),
    "saturation-recovery": Recovery("saturation-recovery", inverted=False),
    "spin-echo-train": EchoTrain(),
    "spin-echo-multi-te": MultiEcho(),
}

__all__ = [
    "METHODS",
    "Estimate",
    "FitMethod",
    "Signals",
    "expected_magnitude",
    "noise_of_background",
    "noise_of_regions",
    "u_total_ms",
]
