"""Several changes in one series."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from qa.trend.change import (
    FEWEST_BEFORE,
    KINDS,
    Change,
    Kind,
    centred,
    find_change,
    inflation_of_differences,
    peak_chance,
)
from qa.trend.streams import Ints
from qa.words import Floats

_SWEEPS = 8  # at most
_BETTER = 0.98  # of the weighted sum of squares: other explanations must fit by so much better to be taken instead


def find_changes(
    t: Floats, y: Floats, sd: Floats, group: Ints | None = None, *, alpha: float, most: int = 3
) -> tuple[Change, ...]:
    """Changes one after another, each believed only if chance gives it with less than `alpha`; in order of onset.

    After each new one, all are fitted again with the others taken out. Where what is left still hangs together over
    time, two changes are tried at once: a fault that was mended hides from a search for one.
    """
    series = _Series(t, y, sd, np.zeros(t.size, dtype=np.intp) if group is None else group)
    found: list[Change] = []
    while len(found) < most:
        rest = series.without(found)
        change = rest.one()
        if change is None:
            break
        new = [change] if change.chance <= alpha else []
        if not new and change.inflation > 1.0:
            new = rest.two_at_once(alpha)
        if not new:
            break
        found = series.again(found + new, alpha) if found or len(new) > 1 else new
    if len(found) > 1:
        found = series.other_explanation(found, alpha)
    return tuple(sorted(found, key=lambda change: change.onset))


@dataclass(frozen=True, slots=True, eq=False)
class _Series:
    t: Floats
    y: Floats
    sd: Floats
    group: Ints

    def without(self, changes: list[Change]) -> _Series:
        if not changes:
            return self
        return _Series(self.t, self.y - np.sum([c.at(self.t) for c in changes], axis=0), self.sd, self.group)

    def one(self, kinds: tuple[Kind, ...] = KINDS, least_inflation: float = 1.0) -> Change | None:
        return find_change(self.t, self.y, self.sd, self.group, kinds=kinds, least_inflation=least_inflation)

    def squares(self, changes: list[Change]) -> float:
        """Weighted sum of squares that the changes leave."""
        weight = 1.0 / self.sd**2
        left = centred(self.without(changes).y[:, None], weight, self.group)[:, 0]
        return float(weight @ left**2)

    def again(self, found: list[Change], alpha: float) -> list[Change]:
        """Each fitted again with the others taken out, twice; one that is no longer believed stays as it was."""
        found = list(found)
        for _ in range(2):
            for place in range(len(found)):
                fresh = self.without(found[:place] + found[place + 1 :]).one()
                if fresh is not None and fresh.chance <= alpha:
                    found[place] = fresh
        return found

    def begun_with(self, kind: Kind, count: int, least_inflation: float = 1.0) -> list[Change]:
        """So many changes, the first at first of this kind, fitted in turns; empty where that cannot be."""
        first = self.one((kind,), least_inflation)
        if first is None:
            return []
        found = [first]
        while len(found) < count:
            more = self.without(found).one(KINDS, least_inflation)
            if more is None:
                return []
            found.append(more)
        for _ in range(_SWEEPS):
            before = [(change.kind, change.onset) for change in found]
            for place in range(count):
                others = self.sized(found)
                fresh = self.without(others[:place] + others[place + 1 :]).one(KINDS, least_inflation)
                if fresh is None:
                    return []
                found[place] = fresh
            if before == [(change.kind, change.onset) for change in found]:
                break
        return found

    def sized(self, changes: list[Change]) -> list[Change]:
        """The same kinds and onsets, all sizes fitted together."""
        shapes = np.stack([change.at(self.t) for change in changes], axis=1)
        weight = 1.0 / self.sd**2
        root = np.sqrt(weight)
        left = centred(np.column_stack([shapes, self.y]), weight, self.group) * root[:, None]
        factors, *_ = np.linalg.lstsq(left[:, :-1], left[:, -1], rcond=1e-6)
        return [
            replace(change, size=change.size * factor, rate=change.rate * factor)
            for change, factor in zip(changes, factors.tolist(), strict=True)
        ]

    def two_at_once(self, alpha: float) -> list[Change]:
        """Two changes that are believed only together; none unless both are, each with half of what both explain.

        Two changes can take in most of what merely lingers, so autocorrelation is taken from differences, too.
        """
        least = inflation_of_differences(self.t, self.y / self.sd, self.group)
        pairs = [pair for pair in (self.begun_with(kind, 2, least) for kind in KINDS) if pair]
        pairs = [pair for pair in pairs if all(change.chance <= alpha for change in pair)]
        best = min(pairs, key=self.squares, default=[])
        return best if best and self._chance_of_half(best) <= alpha else []

    def _chance_of_half(self, pair: list[Change]) -> float:
        """Chance of one change that explains half of what both explain together."""
        inflation = max(change.inflation for change in pair)
        left = max(self.squares(self.sized(pair)), 1e-12)
        explained = pair[0].freedom * float(np.log(self.squares([]) / left)) / inflation
        return peak_chance(float(np.sqrt(max(explained, 0.0) / 2.0)), np.unique(self.t).size, FEWEST_BEFORE)

    def other_explanation(self, found: list[Change], alpha: float) -> list[Change]:
        """The same number of changes begun otherwise, where those fit plainly better."""
        best, least = found, _BETTER * self.squares(found)
        for kind in KINDS:
            other = self.begun_with(kind, len(found))
            if other and all(change.chance <= alpha for change in other) and self.squares(other) < least:
                best, least = other, self.squares(other)
        return best
