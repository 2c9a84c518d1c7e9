"""What each sequence gives for a spin system at one place: Bloch's equations through the repeats, slice averaged.

Every function takes T1, T2 and the local flip factor (true over nominal flip angle), all of one shape S, and
returns signed transverse magnetisation at the echo, S + (times,), relative to equilibrium and a full slice.
Transverse magnetisation is taken to be spoiled at the end of each repeat.
"""

from __future__ import annotations

import numpy as np

from qa.simulate.graphs import echo_train
from qa.simulate.pulses import Profiles
from qa.simulate.truth import Inversion
from qa.words import Floats


def _relax(mz: Floats, time_ms: Floats | float, t1: Floats) -> Floats:
    return np.asarray(1 + (mz - 1) * np.exp(-time_ms / t1))


def _steady(after: Floats, before: Floats) -> Floats:
    """The fixed point of an affine map m -> before + (after - before) m, given its values at m = 1 and m = 0."""
    return before / (1 - (after - before))


def inversion_recovery(
    t1_ms: Floats,
    t2_ms: Floats,
    flip: Floats,
    ti_ms: Floats,
    *,
    te_ms: float,
    tr_ms: float,
    profiles: Profiles,
    inversion: Inversion,
) -> Floats:
    """Inversion, recovery, spin echo, repeated every `tr_ms` (from inversion to inversion) to the steady state.

    The inversion is not slice-selective. TI runs from its middle to the middle of the excitation pulse.
    """
    t1, t2 = t1_ms[..., None, None], t2_ms[..., None, None]
    excite, refocus = (angle[..., None, :] for angle in profiles.at(flip))
    ti = np.asarray(ti_ms, dtype=float)[:, None]
    kept = -inversion.efficiency * np.exp(-inversion.loss_ms / t2)
    if not inversion.adiabatic:
        kept = -kept * np.cos(np.pi * flip)[..., None, None]
    rest = np.maximum(tr_ms - ti - te_ms, 0.0)

    def repeat(mz: Floats) -> tuple[Floats, Floats]:
        ready = _relax(mz * kept, ti, t1)
        back = _relax(ready * np.cos(excite), te_ms / 2, t1)
        back = _relax(back * np.cos(refocus), te_ms / 2, t1)
        return ready, _relax(back, rest, t1)

    whole = np.broadcast_shapes(t1.shape, excite.shape, ti.shape)
    steady = _steady(repeat(np.ones(whole))[1], repeat(np.zeros(whole))[1])
    ready, _ = repeat(steady)
    echo = ready * np.sin(excite) * np.sin(refocus / 2) ** 2 * np.exp(-te_ms / t2)
    return np.asarray(echo @ profiles.weight)


def saturation_recovery(
    t1_ms: Floats,
    t2_ms: Floats,
    flip: Floats,
    ti_ms: Floats,
    *,
    te_ms: float,
    profiles: Profiles,
    left: float = 0.02,
) -> Floats:
    """Saturation that leaves the fraction `left` of equilibrium, recovery for each time, spin echo."""
    excite, refocus = (angle[..., None, :] for angle in profiles.at(flip))
    ready = _relax(np.asarray(left), np.asarray(ti_ms, dtype=float)[:, None], t1_ms[..., None, None])
    echo = ready * np.sin(excite) * np.sin(refocus / 2) ** 2 * np.exp(-te_ms / t2_ms[..., None, None])
    return np.asarray(echo @ profiles.weight)


def spin_echoes(
    t1_ms: Floats, t2_ms: Floats, flip: Floats, te_ms: Floats, *, tr_ms: float, profiles: Profiles
) -> Floats:
    """One spin-echo scan per echo time, each in its own steady state at `tr_ms`."""
    t1, t2 = t1_ms[..., None, None], t2_ms[..., None, None]
    excite, refocus = (angle[..., None, :] for angle in profiles.at(flip))
    te = np.asarray(te_ms, dtype=float)[:, None]

    def repeat(mz: Floats) -> Floats:
        back = _relax(mz * np.cos(excite), te / 2, t1)
        back = _relax(back * np.cos(refocus), te / 2, t1)
        return _relax(back, np.maximum(tr_ms - te, 0.0), t1)

    whole = np.broadcast_shapes(t1.shape, excite.shape, te.shape)
    steady = _steady(repeat(np.ones(whole)), repeat(np.zeros(whole)))
    echo = steady * np.sin(excite) * np.sin(refocus / 2) ** 2 * np.exp(-te / t2)
    return np.asarray(echo @ profiles.weight)


def spin_echo_train(
    t1_ms: Floats, t2_ms: Floats, flip: Floats, spacing_ms: float, echoes: int, *, tr_ms: float, profiles: Profiles
) -> Floats:
    """A multi-echo train in its steady state at `tr_ms`; stimulated echoes and the slice's edges included."""
    t1, t2 = t1_ms[..., None], t2_ms[..., None]
    excite, refocus = profiles.at(flip)
    rest = max(tr_ms - spacing_ms * echoes, 0.0)
    per_unit, left_full = echo_train(t1, t2, excite, refocus, spacing_ms, echoes, start=1.0)
    _, left_none = echo_train(t1, t2, excite, refocus, spacing_ms, echoes, start=0.0)
    steady = _steady(_relax(left_full, rest, t1), _relax(left_none, rest, t1))
    return np.asarray(np.einsum("...ze,z->...e", per_unit * steady[..., None], profiles.weight))
