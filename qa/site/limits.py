"""Limits: tolerances with dates. A later block never changes how an earlier run was judged."""

from __future__ import annotations

from datetime import date
from typing import Literal

from pydantic import model_validator

from qa.site.plate import Positive, SiteModel
from qa.words import Quantity

Against = Literal["baseline", "reference"]


class LimitBlock(SiteModel):
    """One dated block of limits.toml; an absent selector means all."""

    since: date
    quantity: Quantity | None = None
    vials: tuple[str, ...] | None = None
    scanner: str | None = None
    watch_percent: Positive
    act_percent: Positive
    against: Against = "baseline"

    @model_validator(mode="after")
    def _ordered(self) -> LimitBlock:
        if self.act_percent < self.watch_percent:
            raise ValueError("act_percent is below watch_percent")
        return self

    def covers(self, quantity: Quantity, vial: str, scanner: str) -> bool:
        """Whether this block speaks of that stream."""
        return (
            self.quantity in (None, quantity)
            and (self.vials is None or vial in self.vials)
            and self.scanner in (None, scanner)
        )

    @property
    def selectors(self) -> int:
        """How many selectors the block has: the more, the more specific."""
        return sum(value is not None for value in (self.quantity, self.vials, self.scanner))


def in_force(
    blocks: tuple[LimitBlock, ...], day: date, quantity: Quantity, vial: str, scanner: str
) -> dict[Against, LimitBlock]:
    """The limits that held on `day` for one stream: at most one against the baseline and one against the reference.

    The most specific block wins; among equally specific ones the latest `since`, then the later in the file.
    """
    found: dict[Against, tuple[tuple[int, date, int], LimitBlock]] = {}
    for index, block in enumerate(blocks):
        if block.since <= day and block.covers(quantity, vial, scanner):
            rank = (block.selectors, block.since, index)
            if block.against not in found or found[block.against][0] < rank:
                found[block.against] = (rank, block)
    return {against: block for against, (_, block) in found.items()}
