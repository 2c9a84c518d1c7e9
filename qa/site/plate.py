"""A plate: the arrangement of vials, and the reference values that go with them."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field, model_validator

from qa.words import Quantity

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Finite = Annotated[float, Field(allow_inf_nan=False)]


class SiteModel(BaseModel):
    """Frozen, and unknown keys are errors: what the user wrote is what is used."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class Vial(SiteModel):
    """One vial. x to the right and y up, in the plate's own frame, seen from its labelled face."""

    label: str = Field(min_length=1)
    x_mm: Finite
    y_mm: Finite
    radius_mm: Positive


class Reference(SiteModel):
    """A certified value of one quantity in one vial at one field."""

    vial: str
    quantity: Quantity
    field_t: Positive
    value_ms: Positive
    u_ms: Annotated[float, Field(ge=0, allow_inf_nan=False)]
    at_c: Finite = 20.0
    per_k_percent: Finite = 0.0
    u_per_k_percent: Annotated[float, Field(ge=0, allow_inf_nan=False)] = 0.0


class Plate(SiteModel):
    """Vials and references. Labels are unique; every reference names a vial of the plate."""

    name: str = Field(min_length=1)
    vials: tuple[Vial, ...] = Field(min_length=3)
    references: tuple[Reference, ...] = ()

    @model_validator(mode="after")
    def _labels(self) -> Plate:
        labels = [vial.label for vial in self.vials]
        twice = sorted({label for label in labels if labels.count(label) > 1})
        if twice:
            raise ValueError(f"vial labels are used twice: {', '.join(twice)}")
        lost = sorted({ref.vial for ref in self.references} - set(labels))
        if lost:
            raise ValueError(f"references name vials that the plate does not have: {', '.join(lost)}")
        return self

    def vial(self, label: str) -> Vial:
        """The vial of that label (KeyError if there is none)."""
        for vial in self.vials:
            if vial.label == label:
                return vial
        raise KeyError(label)

    def reference(self, vial: str, quantity: Quantity, field_t: float) -> Reference | None:
        """The reference for a vial and quantity at the certified field nearest to `field_t`, within 10 %; else None."""
        near = [
            ref
            for ref in self.references
            if ref.vial == vial and ref.quantity == quantity and abs(ref.field_t - field_t) <= 0.1 * field_t
        ]
        return min(near, key=lambda ref: abs(ref.field_t - field_t), default=None)
