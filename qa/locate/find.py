"""Where the plate lies, or why that cannot be said: the decisions, on top of evidence and search."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

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

SEEN = 0.42  # explained share of the variance from which a vial counts as seen
MISSING_ALLOWED = 2
SURE = 2.0  # score by which the best labelling has to beat every other
SURE_SHARE = 0.06  # … and as a share of its own score
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
    seen = shares[0] >= SEEN
    needed = max(3, vials - MISSING_ALLOWED)
    margin = float(totals[0] - totals[1]) if len(totals) > 1 else float(totals[0])
    need = max(SURE, SURE_SHARE * float(totals[0]))
    if seen.sum() < needed:
        if seen.sum() < max(3, 0.5 * vials):
            return NotLocated("no-plate", f"nothing in the images is arranged like the plate '{case.plate.name}'")
        lost = ", ".join(vial.label for vial, there in zip(case.plate.vials, seen, strict=True) if not there)
        text = f"only {seen.sum()} of {vials} vials could be seen, and {needed} are needed; perhaps missing: {lost}"
        return NotLocated("too-few-vials", text)
    if margin < need:
        return NotLocated("ambiguous", _why(found, case))
    return _placement(case, found.take([0]), seen, shares[0], float(np.clip(margin / (2 * need), 0, 1)))


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


def _placement(case: _Case, best: Placements, seen: Floats, shares: Floats, confidence: float) -> Placement:
    """The chosen placement, made finer on the images' own voxels."""
    target = best.at(case.design)[0]
    weight = np.where(seen, shares / (1.05 - shares), 0.0)
    for _ in range(3):
        found, ok = rim_centres(case.components, case.spacing_mm, target, case.radii)
        use = weight * ok
        if np.count_nonzero(use) < 3:
            found, use = best.at(case.design)[0], weight
        best = _robust(case.design, best, found, use)
        target = best.at(case.design)[0]
    at = best.at(case.design)[0]
    apart = np.abs(found - at)[use > 0]
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
