"""What enters and leaves the fit room: signals with their times and noise; estimates with covariance and codes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from qa.words import Floats, Ints, Quantity, State


@dataclass(frozen=True, slots=True, eq=False)
class Signals:
    """Signals of many vials (or voxels) that share their times. n = rows (vials or voxels), m = samples."""

    values: Floats  # (n, m); linear units; magnitudes unless `signed`
    times_ms: Floats  # (m,), the TI of inversion and saturation recovery, the TE of spin echoes; increasing
    signed: bool
    noise: float  # standard deviation of Gaussian noise in one channel of ONE voxel (before magnitude), signal units
    voxels: Floats  # (n,), how many independent voxels were averaged into each row (1 for a voxel map)
    tr_ms: float  # NaN where unknown
    te_ms: float = float("nan")  # recovery series: the echo time of their readout; NaN where unknown
    t1_ms: Floats | None = None  # (n,), T1 of the same vial from the same run, NaN where unknown (for T2 methods)
    u_t1_ms: Floats | None = None  # (n,)
    x_mm: Floats | None = None  # (n,), where the vial lies on the plate, for fields that vary smoothly across it
    y_mm: Floats | None = None  # (n,)
    refocusing_deg: float = 180.0  # nominal angle of the refocusing pulses


@dataclass(frozen=True, slots=True, eq=False)
class Estimate:
    """One row per vial or voxel. Rows whose state is not GOOD or MARKED have NaN as value and say why in `notes`."""

    quantity: Quantity
    value_ms: Floats  # (n,)
    u_ms: Floats  # (n,), standard uncertainty from noise (scaled by the residuals where they exceed it), k = 1
    u_model_ms: Floats  # (n,), standard uncertainty of what the model had to assume (T1, angle, profile, finite TR)
    names: tuple[str, ...]  # parameter names, in the order of `parameters` and `covariance`; the first is value_ms
    parameters: Floats  # (n, p)
    covariance: Floats  # (n, p, p)
    fitted: Floats  # (n, m), signal units; what the model expects of the magnitude (noise floor included)
    residual: Floats  # (n, m), values - fitted
    reduced_chi2: Floats  # (n,)
    states: tuple[State, ...]  # (n,)
    notes: tuple[tuple[str, ...], ...]  # (n,) sentences
    shared: Mapping[str, float] = field(default_factory=dict)  # run-level findings, with units in the names
    # e.g. {"inversion_efficiency": 0.97, "refocusing_angle_deg": 165.0, "refocusing_width": 1.1}


class FitMethod(Protocol):
    """One entry of the table `qa.fit.METHODS`; every entry goes through one contract test."""

    @property
    def name(self) -> str:
        """As recipes write it."""
        ...

    @property
    def version(self) -> str:
        """Raised whenever the numbers may change: "1"."""
        ...

    @property
    def quantity(self) -> Quantity:
        """What it measures."""
        ...

    @property
    def min_samples(self) -> int:
        """How many different times it needs."""
        ...

    def fit(self, signals: Signals) -> Estimate:
        """Fit vial averages."""
        ...

    def map(self, signals: Signals, of_vials: Estimate, vial: Ints) -> Floats:
        """Value per voxel in ms (n,), NaN where it fails; `vial` (n,) gives each voxel's row in `of_vials`."""
        ...


def u_total_ms(estimate: Estimate) -> Floats:
    """Noise and model parts combined in quadrature, (n,), ms."""
    return np.asarray(np.hypot(estimate.u_ms, estimate.u_model_ms))
