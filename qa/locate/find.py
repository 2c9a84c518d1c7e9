"""Where the plate lies, or why that cannot be said: the decisions, on top of evidence and search."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qa.locate.evidence import evidence, principal, resample
from qa.locate.placement import NotLocated, Placement
from qa.locate.rims import rim_centres
from qa.locate.search import (
    Field,
    Placements,
    Points,
    compose,
    fit,
    join,
    lookalikes,
    ranked,
    refine,
    search,
)
from qa.site.plate import Plate
from qa.words import Floats, Pixels

SEEN = 0.25  # explained share of the variance from which a vial counts as seen
MISSING_ALLOWED = 2
MISSING_SHARE = 0.25  # … of many vials, more
SURE = 2.0  # score by which the best labelling has to beat every other: one vial that is clearly there, or not
SURE_FIT = 12.0  # log-likelihood by which its centres have to fit better where the score does not tell
SURE_SHARE = 0.04  # … and as a share of its own score
_SMALLEST = 24  # voxels, shorter side


def locate(frames: Pixels, spacing_mm: tuple[float, float], plate: Plate) -> Placement | NotLocated:
    """Find the plate in the images from the geometry of its vials alone.

    Any rotation in the plane, shift, mirror image, scale error up to 3 % and receive shading; vials brighter or darker
    than what is around them, in any frame; up to two vials not to be seen. What cannot be told is refused.

    Parameters
    ----------
    frames : (frames, rows, columns) float32
        All frames of one or several scans on one grid; each frame may have a scale of its own.
    spacing_mm : between rows, between columns
    plate : the arrangement of vials

    Returns
    -------
    Placement | NotLocated
        NotLocated.code is "image-too-small", "no-plate", "too-few-vials" or "ambiguous".
    """
    stack = np.asarray(frames, dtype=np.float32)
    stack = stack[None] if stack.ndim == 2 else stack
    if not np.isfinite(stack).all():
        stack = np.nan_to_num(stack, nan=0.0, posinf=0.0, neginf=0.0)
    refusal = _too_small(stack, spacing_mm, plate)
    if refusal:
        return refusal
    radii = np.array([vial.radius_mm for vial in plate.vials])
    points = np.array([complex(vial.x_mm, vial.y_mm) for vial in plate.vials])
    middle = points.mean()
    design = points - middle
    components, _ = principal(stack)
    working = resample(components, spacing_mm, float(radii.min()), float(radii.max()))
    field = Field(evidence(working, radii, _gap(points, radii)))
    apart = 0.6 * float(radii.min())
    found, totals = search(field, design, apart)
    if not len(totals):
        return NotLocated("no-plate", "nothing in the images looks like a vial of this plate")
    best = found.take([0])
    rivals = compose(best, lookalikes(design, apart))
    rivals = refine(field, rivals, design, 0.5 * apart + field.pixel_mm) if len(rivals.turn) else rivals
    found, totals = ranked(field, join(found, rivals), design, apart)
    shares = field.smooth(field.evidence.maps, found.at(design))
    return _decide(_Case(plate, components, spacing_mm, design, middle, radii, apart), found, totals, shares)


@dataclass(frozen=True, slots=True, eq=False)
class _Case:
    plate: Plate
    components: Pixels
    spacing_mm: tuple[float, float]
    design: Points
    middle: complex
    radii: Floats
    apart_mm: float


def _too_small(stack: Pixels, spacing_mm: tuple[float, float], plate: Plate) -> NotLocated | None:
    rows, columns = stack.shape[1:]
    if len(stack) == 0 or min(rows, columns) < _SMALLEST:
        return NotLocated(
            "image-too-small", f"the images have {rows} x {columns} voxels; {_SMALLEST} are needed each way"
        )
    smallest = min(vial.radius_mm for vial in plate.vials)
    if smallest < 1.2 * max(spacing_mm):
        what = (
            f"voxels of {spacing_mm[0]:.2g} x {spacing_mm[1]:.2g} mm are too coarse for vials of {smallest:g} mm radius"
        )
        return NotLocated("image-too-small", what)
    field_mm = float(np.hypot(rows * spacing_mm[0], columns * spacing_mm[1]))
    x, y = np.array([v.x_mm for v in plate.vials]), np.array([v.y_mm for v in plate.vials])
    span = float(np.hypot(x[:, None] - x, y[:, None] - y).max())
    if field_mm < 0.8 * span:
        size = f"{rows * spacing_mm[0]:.0f} x {columns * spacing_mm[1]:.0f} mm"
        what = f"the field of view is {size}, too small for a plate {span:.0f} mm wide"
        return NotLocated("image-too-small", what)
    return None


def _gap(points: Points, radii: Floats) -> float:
    """Smallest distance between the rims of two vials, mm."""
    apart = np.abs(points[:, None] - points[None, :]) - radii[:, None] - radii[None, :]
    np.fill_diagonal(apart, np.inf)
    return float(apart.min())


def _decide(case: _Case, found: Placements, totals: Floats, shares: Floats) -> Placement | NotLocated:
    vials = len(case.design)
    seen = shares >= SEEN
    count = int(seen[0].sum())
    needed = max(3, vials - max(MISSING_ALLOWED, int(MISSING_SHARE * vials)))
    if count < needed:
        if count < max(3, 0.5 * vials):
            return NotLocated("no-plate", f"nothing in the images is arranged like the plate '{case.plate.name}'")
        lost = ", ".join(vial.label for vial, there in zip(case.plate.vials, seen[0], strict=True) if not there)
        text = f"only {count} of {vials} vials could be seen, and {needed} are needed; perhaps missing: {lost}"
        return NotLocated("too-few-vials", text)
    need = max(SURE, SURE_SHARE * float(totals[0]))
    close = np.flatnonzero(totals > totals[0] - 2 * need)
    settled = [_settle(case, found.take([k]), shares[k]) for k in close]
    # The labelling that is in front has to beat every other, by score and by how well the centres fit together.
    lead = [
        (float(totals[0] - totals[k]) / need) + _fits_better(settled[0], other, case) / SURE_FIT
        for k, other in zip(close[1:], settled[1:], strict=True)
    ]
    if lead and min(lead) < 1:
        rival = int(close[1 + int(np.argmin(lead))])
        if count < 0.75 * vials and float(totals[0]) < 1.8 * count:
            return NotLocated("no-plate", f"nothing in the images is arranged like the plate '{case.plate.name}'")
        return NotLocated("ambiguous", _why(found.take([0, rival]), case))
    ahead = min([*lead, float(totals[0] - totals[len(close)]) / need if len(totals) > len(close) else 2.0])
    return _placement(case, settled[0], seen[0], float(np.clip(ahead / 2, 0, 1)))


def _why(found: Placements, case: _Case) -> str:
    """Name what the second labelling differs by."""
    mirrored = bool(found.flipped[0] != found.flipped[1])
    relative = found.turn[1] / found.turn[0]
    angle = abs(float(np.rad2deg(np.angle(relative))))
    moved = float(np.abs(found.shift[1] - found.shift[0]))
    if mirrored:
        how = "mirrored (seen from its other face)"
    elif angle > 3:
        how = f"turned by {angle:.0f} degrees"
    else:
        how = f"shifted by {moved:.0f} mm"
    return (
        f"{how} the plate '{case.plate.name}' fits as well, so the vials' labels cannot be told from the geometry; "
        "a plate without symmetry, or the vial that breaks it, is needed"
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Settled:
    """A placement made finer on the images' own voxels."""

    best: Placements
    found: Points  # (vials,) centres from the rims
    used: Floats  # (vials,) weight; 0: not used


def _settle(case: _Case, best: Placements, shares: Floats) -> _Settled:
    weight = np.where(shares >= SEEN, shares / (1.05 - shares), 0.0)
    found, used = best.at(case.design)[0], weight
    for _ in range(3):
        found, usable = rim_centres(case.components, case.spacing_mm, best.at(case.design)[0], case.radii)
        used = weight * usable
        if np.count_nonzero(used) < 3:
            return _Settled(best, best.at(case.design)[0], weight)
        best = _robust(case.design, best, found, used)
    return _Settled(best, found, used)


def _fits_better(one: _Settled, other: _Settled, case: _Case) -> float:
    """Log-likelihood ratio of two placements from the distances of found and fitted centres (Gaussian, cut at 3 sigma).

    Sigma is what the one leaves, but at least what plates are built to: 0.3 mm.
    """
    apart = [np.abs(each.found - each.best.at(case.design)[0]) for each in (one, other)]
    both = (one.used > 0) & (other.used > 0)
    if not both.any():
        return 0.0
    sigma = max(float(np.sqrt(np.median(apart[0][both] ** 2))), 0.3, 0.15 * max(case.spacing_mm))
    cut = [np.minimum(each[both] / sigma, 3.0) ** 2 for each in apart]
    return float(cut[1].sum() - cut[0].sum()) / 2


def _placement(case: _Case, settled: _Settled, seen: NDArray[np.bool_], confidence: float) -> Placement:
    best = settled.best
    apart = np.abs(settled.found - best.at(case.design)[0])[settled.used > 0]
    origin = best.at(np.array([-case.middle]))[0, 0]
    labels = [vial.label for vial in case.plate.vials]
    return Placement(
        centre_row=float(-origin.imag / case.spacing_mm[0]),
        centre_column=float(origin.real / case.spacing_mm[1]),
        rotation_deg=_half_turn(float(np.rad2deg(np.angle(best.turn[0])))),
        flipped=bool(best.flipped[0]),
        scale=float(np.abs(best.turn[0])),
        residual_mm=float(np.sqrt(np.mean(apart**2))),
        confidence=confidence,
        seen=tuple(label for label, there in zip(labels, seen, strict=True) if there),
        missing=tuple(label for label, there in zip(labels, seen, strict=True) if not there),
    )


def _half_turn(degrees: float) -> float:
    return degrees + 360.0 if degrees <= -180.0 else degrees


def _robust(design: Points, start: Placements, found: Points, weight: Floats) -> Placements:
    """Similarity fit with Tukey weights, so that a vial with a bubble does not pull."""
    current = fit(design, start.flipped, found[None, :], weight[None, :])
    for _ in range(4):
        apart = np.abs(found - current.at(design)[0])
        spread = max(1.4826 * float(np.median(apart[weight > 0])), 0.02)
        tukey = np.clip(1 - (apart / (4.0 * spread)) ** 2, 0.0, 1) ** 2
        if np.count_nonzero(tukey * weight > 0) < 3:
            break
        current = fit(design, current.flipped, found[None, :], (tukey * weight)[None, :])
    return current
