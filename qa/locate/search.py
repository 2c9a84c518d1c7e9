"""Every way the plate could lie on the evidence: hypotheses from pairs of candidate centres, scored and refined.

Points are complex numbers, mm: real part to the right, imaginary part upwards, the centre of the image's first voxel
at 0. A placement is (c, t, flipped): a plate point z lies at ``c * z' + t``, where z' is z, or its mirror image
``-conj(z)``. Generating hypotheses from pairs and scoring them against everything seen is the scheme of Fischler and
Bolles (1981), Commun. ACM 24(6), 381-395, here over all pairs instead of random ones.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.locate.evidence import Evidence
from qa.words import Floats, Ints

Points = NDArray[np.complex128]

SCALE_TOLERANCE = 0.035
_SOFT = 0.05  # unexplained share that counts as perfect
_NOTHING, _SOMETHING = 0.12, 0.32  # shares: empty places hardly ever exceed the one, vials hardly ever fall below
_THERE = 0.8  # score for being there at all, besides the log-likelihood of the fit
_PAIRS = 48
_HYPOTHESES = 40_000
_SHORTLIST = 400


@dataclass(frozen=True, slots=True, eq=False)
class Placements:
    """Several placements at once."""

    turn: Points  # (placements,) complex scale and rotation
    shift: Points  # (placements,)
    flipped: NDArray[np.bool_]  # (placements,)

    def at(self, plate: Points) -> Points:
        """Where each vial lies, (placements, vials)."""
        return np.asarray(self.turn[:, None] * seen_from(plate, self.flipped) + self.shift[:, None])

    def take(self, which: Any) -> Placements:
        """A selection of these."""
        return Placements(self.turn[which], self.shift[which], self.flipped[which])


def seen_from(plate: Points, flipped: NDArray[np.bool_]) -> Points:
    """Plate points, mirrored where flipped: (placements, vials)."""
    return np.asarray(np.where(flipped[:, None], -np.conj(plate)[None, :], plate[None, :]), dtype=np.complex128)


def join(*parts: Placements) -> Placements:
    """All of these, one after another."""
    return Placements(
        np.concatenate([p.turn for p in parts]),
        np.concatenate([p.shift for p in parts]),
        np.concatenate([p.flipped for p in parts]),
    )


class Field:
    """The evidence as a score that can be added over vials, with look-up by position in mm."""

    def __init__(self, evidence: Evidence) -> None:
        self.evidence = evidence
        self.size_of = np.array(evidence.size_of)
        there = np.clip((evidence.maps - _NOTHING) / (_SOMETHING - _NOTHING), 0, 1)
        self.score = np.log(1 + _SOFT) - np.log(1 + _SOFT - evidence.maps) + np.float32(_THERE) * there
        working = evidence.working
        self._origin = np.array([working.pad[0] * working.step[0], working.pad[1] * working.step[1]])
        self._pixel = working.pixel_mm
        self.shape = evidence.maps.shape[1:]
        self.pixel_mm = float(np.mean(self._pixel))

    def pixels(self, points: Points) -> tuple[Floats, Floats]:
        """Fractional (rows, columns) of the search grid."""
        return self._origin[0] - points.imag / self._pixel[0], self._origin[1] + points.real / self._pixel[1]

    def points(self, rows: Floats, columns: Floats) -> Points:
        """The reverse of `pixels`."""
        return np.asarray((columns - self._origin[1]) * self._pixel[1] - 1j * (rows - self._origin[0]) * self._pixel[0])

    def nearest(self, table: NDArray[np.float32], points: Points) -> NDArray[np.float32]:
        """Values of `table` (sizes, rows, columns) at (..., vials) points, nearest pixel, zero outside."""
        rows, columns = self.pixels(points)
        row, column = np.rint(rows).astype(np.intp), np.rint(columns).astype(np.intp)
        inside = (row >= 0) & (row < self.shape[0]) & (column >= 0) & (column < self.shape[1])
        flat = (self.size_of * self.shape[0] + np.where(inside, row, 0)) * self.shape[1] + np.where(inside, column, 0)
        return np.asarray(np.where(inside, table.ravel()[flat], np.float32(0)))

    def smooth(self, table: NDArray[np.float32], points: Points) -> Floats:
        """As `nearest`, interpolated between four pixels."""
        rows, columns = self.pixels(points)
        rows, columns = np.clip(rows, 0, self.shape[0] - 1.001), np.clip(columns, 0, self.shape[1] - 1.001)
        row, column = rows.astype(np.intp), columns.astype(np.intp)
        dy, dx = rows - row, columns - column
        flat = (self.size_of * self.shape[0] + row) * self.shape[1] + column
        values, wide = table.ravel(), self.shape[1]
        upper = values[flat] * (1 - dx) + values[flat + 1] * dx
        lower = values[flat + wide] * (1 - dx) + values[flat + wide + 1] * dx
        return np.asarray(upper * (1 - dy) + lower * dy, dtype=float)

    def totals(self, placements: Placements, plate: Points) -> Floats:
        """The score of each placement: sum over its vials."""
        return np.asarray(self.smooth(self.score, placements.at(plate)).sum(axis=1))


def _highest(table: NDArray[np.float32], reach: int) -> NDArray[np.float32]:
    """Maximum over a square of ``2 * reach + 1`` pixels around each pixel, last two axes."""
    for axis in (-2, -1):
        out = table.copy()
        for step in range(1, reach + 1):
            for way in (step, -step):
                np.maximum(out, np.roll(table, way, axis=axis), out=out)
        table = out
    return table


def candidates(field: Field, vials: int) -> tuple[Points, Floats]:
    """Places that look like the centre of a vial of any of the plate's sizes: points and scores, best first."""
    best = field.score.max(axis=0)
    peak = (best >= _highest(best, 2)) & (best > 0.12)
    rows, columns = np.nonzero(peak)
    order = np.argsort(-best[rows, columns])[: int(1.6 * vials) + 14]
    rows, columns = rows[order], columns[order]
    inner_rows = np.clip(rows, 1, field.shape[0] - 2)
    inner_columns = np.clip(columns, 1, field.shape[1] - 2)
    dy = _vertex(*(best[inner_rows + k, inner_columns] for k in (-1, 0, 1)))
    dx = _vertex(*(best[inner_rows, inner_columns + k] for k in (-1, 0, 1)))
    return field.points(inner_rows + dy, inner_columns + dx), best[rows, columns].astype(float)


def _vertex(before: Any, middle: Any, after: Any) -> Floats:
    """Top of the parabola through three neighbours, in pixels from the middle one, at most half."""
    bend = before - 2 * middle + after
    top = np.where(bend < 0, 0.5 * (before - after) / np.where(bend < 0, bend, -1.0), 0.0)
    return np.clip(top, -0.5, 0.5)


def telling_pairs(plate: Points) -> tuple[Ints, Ints]:
    """Pairs of vials for making hypotheses: long ones, for they give the angle best, and no vial in too many."""
    first, second = np.triu_indices(len(plate), 1)
    order = np.argsort(-np.abs(plate[first] - plate[second]))
    if len(order) <= _PAIRS:
        return first[order], second[order]
    limit, used, chosen = max(4, 3 * _PAIRS // len(plate)), np.zeros(len(plate), dtype=int), []
    for pair in order:
        if used[first[pair]] < limit and used[second[pair]] < limit:
            used[first[pair]] += 1
            used[second[pair]] += 1
            chosen.append(pair)
        if len(chosen) == _PAIRS:
            break
    return first[chosen], second[chosen]


def hypotheses(plate: Points, places: Points, slack_mm: float) -> Placements:
    """Placements that lay a pair of vials on a pair of places at the right distance (scale error and slack allowed)."""
    first, second = telling_pairs(plate)
    length = np.abs(plate[first] - plate[second])
    between = np.abs(places[:, None] - places[None, :])
    ratio = between[None] / length[:, None, None]
    pair, one, other = np.nonzero(np.abs(ratio - 1) < SCALE_TOLERANCE + (slack_mm / length)[:, None, None])
    if len(pair) > _HYPOTHESES:  # places come best first: keep those between good places
        keep = np.argsort(one + other, kind="stable")[:_HYPOTHESES]
        pair, one, other = pair[keep], one[keep], other[keep]
    found = []
    for flip in (False, True):
        z = -np.conj(plate) if flip else plate
        turn = (places[other] - places[one]) / (z[second[pair]] - z[first[pair]])
        turn *= np.clip(np.abs(turn), 1 - SCALE_TOLERANCE, 1 + SCALE_TOLERANCE) / np.abs(turn)
        middle = 0.5 * (places[one] + places[other])
        shift = middle - turn * 0.5 * (z[second[pair]] + z[first[pair]])
        found.append(Placements(turn, shift, np.full(len(turn), flip)))
    return join(*found)


def distinct(placements: Placements, plate: Points, apart_mm: float, most: int) -> Ints:
    """Indices of placements, in the given order, of which no two agree on all vials within `apart_mm`."""
    at = placements.at(plate)
    left = np.ones(len(at), dtype=bool)
    chosen: list[int] = []
    while left.any() and len(chosen) < most:
        index = int(np.argmax(left))
        chosen.append(index)
        left &= np.abs(at - at[index]).max(axis=1) > apart_mm
        left[index] = False
    return np.array(chosen, dtype=np.intp)


def refine(field: Field, placements: Placements, plate: Points, reach_mm: float, rounds: int = 3) -> Placements:
    """Move each placement to where the evidence near its vials is strongest (iterated robust least squares)."""
    reach = max(2, round(reach_mm / field.pixel_mm))
    steps = np.arange(-reach, reach + 1)
    dy, dx = (grid.ravel() for grid in np.meshgrid(steps, steps, indexing="ij"))
    near = np.hypot(dy, dx) <= reach + 0.5
    dy, dx = dy[near], dx[near]
    penalty = 0.35 * (dy**2 + dx**2) / reach**2
    values, wide = field.score.ravel(), field.shape[1]
    for turn in range(rounds):
        at = placements.at(plate)
        rows, columns = field.pixels(at)
        row = np.clip(np.rint(rows), reach + 1, field.shape[0] - reach - 2).astype(np.intp)
        column = np.clip(np.rint(columns), reach + 1, field.shape[1] - reach - 2).astype(np.intp)
        flat = (field.size_of * field.shape[0] + row) * wide + column
        around = values[flat[..., None] + dy * wide + dx] - penalty
        best = around.argmax(axis=-1)
        flat = flat + dy[best] * wide + dx[best]
        off_y = _vertex(values[flat - wide], values[flat], values[flat + wide])
        off_x = _vertex(values[flat - 1], values[flat], values[flat + 1])
        target = field.points(row + dy[best] + off_y, column + dx[best] + off_x)
        apart = np.abs(target - at)
        limit = reach_mm * (1.5 if turn == 0 else 1.0)
        weight = np.maximum(values[flat], 1e-3) * np.clip(1 - (apart / limit) ** 2, 0.02, 1) ** 2
        placements = fit(plate, placements.flipped, target, weight)
    return placements


def fit(plate: Points, flipped: NDArray[np.bool_], target: Points, weight: Floats) -> Placements:
    """Weighted least-squares similarity for each row of `target` (placements, vials).

    Closed form; with complex numbers it is a regression line (Umeyama 1991, IEEE PAMI 13(4), 376-380, gives the
    general case). The scale is kept within the tolerance.
    """
    z = seen_from(plate, flipped)
    total = weight.sum(axis=1)
    mean_z, mean_t = (weight * z).sum(axis=1) / total, (weight * target).sum(axis=1) / total
    z = z - mean_z[:, None]
    turn = (weight * np.conj(z) * (target - mean_t[:, None])).sum(axis=1) / (weight * np.abs(z) ** 2).sum(axis=1)
    size = np.maximum(np.abs(turn), 1e-9)
    turn = turn * np.clip(size, 1 - SCALE_TOLERANCE, 1 + SCALE_TOLERANCE) / size
    return Placements(turn, mean_t - turn * mean_z, flipped)


def search(field: Field, plate: Points, apart_mm: float, most: int = 8) -> tuple[Placements, Floats]:
    """The best placements that differ in labelling, refined, best first, with their scores."""
    places, _ = candidates(field, len(plate))
    none = Placements(np.empty(0, complex), np.empty(0, complex), np.empty(0, bool))
    if len(places) < 3:
        return none, np.empty(0)
    guesses = hypotheses(plate, places, slack_mm=0.8 * field.pixel_mm)
    if not len(guesses.turn):
        return none, np.empty(0)
    loose = _highest(field.score, 1)
    rough = field.nearest(loose, guesses.at(plate)).sum(axis=1)
    count = min(_SHORTLIST, len(rough))
    order = np.argpartition(-rough, count - 1)[:count]
    order = order[np.argsort(-rough[order], kind="stable")]
    guesses = guesses.take(order)
    guesses = guesses.take(distinct(guesses, plate, apart_mm, most))
    return ranked(field, refine(field, guesses, plate, 0.5 * apart_mm + field.pixel_mm), plate, apart_mm)


def ranked(field: Field, placements: Placements, plate: Points, apart_mm: float) -> tuple[Placements, Floats]:
    """Best first, one of each labelling."""
    totals = field.totals(placements, plate)
    placements, totals = placements.take(order := np.argsort(-totals)), totals[order]
    keep = distinct(placements, plate, apart_mm, len(totals))
    return placements.take(keep), totals[keep]


def lookalikes(plate: Points, within_mm: float, most: int = 8) -> Placements:
    """Ways to lay the plate nearly onto itself with other labels: the placements it could be confused with."""
    guesses = hypotheses(plate, plate, slack_mm=within_mm)
    at = guesses.at(plate)
    gap = np.abs(at[:, :, None] - plate[None, None, :]).min(axis=2)
    alike = np.clip(1 - gap / (2 * within_mm), 0, 1).sum(axis=1)
    same = np.abs(at - plate[None, :]).max(axis=1) <= 2 * within_mm
    alike[same] = -1.0
    order = np.argsort(-alike, kind="stable")[:_SHORTLIST]
    guesses, alike = guesses.take(order), alike[order]
    keep = distinct(guesses, plate, 2 * within_mm, most)
    return guesses.take(keep[alike[keep] > 0.3 * len(plate)])


def compose(outer: Placements, inner: Placements) -> Placements:
    """The plate laid onto itself by `inner`, then placed by `outer` (one placement); see `lookalikes`."""
    turn, shift, flip = outer.turn[0], outer.shift[0], bool(outer.flipped[0])
    if not flip:
        return Placements(turn * inner.turn, turn * inner.shift + shift, inner.flipped.copy())
    # outer: c * (-conj(w)) + t, with w = c2 * z' + t2; mirror of z' swaps the flip
    return Placements(turn * np.conj(inner.turn), -turn * np.conj(inner.shift) + shift, ~inner.flipped)
