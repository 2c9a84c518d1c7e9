"""A recipe: what a run should contain, scan by scan."""

from __future__ import annotations

import re
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from qa.site.plate import Positive, SiteModel
from qa.words import Consequence, Quantity

Method = Literal["inversion-recovery", "saturation-recovery", "spin-echo-train", "spin-echo-multi-te"]

QUANTITY_OF: dict[str, Quantity] = {
    "inversion-recovery": Quantity.T1,
    "saturation-recovery": Quantity.T1,
    "spin-echo-train": Quantity.T2,
    "spin-echo-multi-te": Quantity.T2,
}
NonNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]


class Scan(SiteModel):
    """One scan. It gives a stream of its own; two scans may measure one quantity by two methods."""

    name: str = Field(min_length=1)
    quantity: Quantity
    method: Method
    match: dict[str, str] = Field(min_length=1)  # DICOM keyword = regular expression
    ti_ms: tuple[NonNegative, ...] = ()
    te_ms: tuple[NonNegative, ...] = ()
    tr_ms: Positive | None = None
    refocusing_deg: Positive | None = None  # nominal angle of the refocusing pulses, if known
    tolerance_percent: Positive = 1.0  # how far a time may be from the recipe before it is remarked
    consequence: dict[str, Consequence] = Field(default={})  # remark code = what follows from it; default: in the check

    @field_validator("match")
    @classmethod
    def _compiles(cls, match: dict[str, str]) -> dict[str, str]:
        for keyword, pattern in match.items():
            try:
                re.compile(pattern)
            except re.error as error:
                raise ValueError(f"'{pattern}' for {keyword} is not a regular expression: {error}") from error
        return match

    @model_validator(mode="after")
    def _fits_method(self) -> Scan:
        if QUANTITY_OF[self.method] != self.quantity:
            raise ValueError(f"method {self.method} measures {QUANTITY_OF[self.method]}, not {self.quantity}")
        return self


class Recipe(SiteModel):
    """Scans in the order in which they are shown. Scan names are unique."""

    name: str = Field(min_length=1)
    scans: tuple[Scan, ...] = Field(min_length=1)

    @model_validator(mode="after")
    def _names(self) -> Recipe:
        names = [scan.name for scan in self.scans]
        if len(set(names)) != len(names):
            raise ValueError("two scans have one name")
        return self
