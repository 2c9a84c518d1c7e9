"""What leaves the locate room: where the plate lies in the image, and the voxels that belong to each vial."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.site.plate import Plate
from qa.words import Floats, Ints


@dataclass(frozen=True, slots=True)
class Placement:
    """A plate in an image.

    A plate point (x, y) in mm (y up, seen from the labelled face) lies in the image at::

        x' = -x if flipped else x
        across = scale * (x' * cos(rotation) - y * sin(rotation))     # mm, to the right (increasing column)
        up     = scale * (x' * sin(rotation) + y * cos(rotation))     # mm, upwards (decreasing row)
        column = centre_column + across / column_spacing_mm
        row    = centre_row - up / row_spacing_mm

    so a positive rotation is counter-clockwise as seen on the displayed image.
    """

    centre_row: float
    centre_column: float
    rotation_deg: float  # in (-180, 180]
    flipped: bool
    scale: float  # found size over stated size: the gradient calibration
    residual_mm: float  # rms distance between the found and the fitted vial centres
    confidence: float  # 0 to 1; how far the best labelling stands out from the second best
    seen: tuple[str, ...]  # labels of the vials that were found in the image
    missing: tuple[str, ...]  # labels of the vials that were not

    def to_image(self, x_mm: Floats, y_mm: Floats, spacing_mm: tuple[float, float]) -> tuple[Floats, Floats]:
        """Fractional (rows, columns) of plate points in mm."""
        angle = np.deg2rad(self.rotation_deg)
        x = -np.asarray(x_mm, dtype=float) if self.flipped else np.asarray(x_mm, dtype=float)
        y = np.asarray(y_mm, dtype=float)
        across = self.scale * (x * np.cos(angle) - y * np.sin(angle))
        up = self.scale * (x * np.sin(angle) + y * np.cos(angle))
        return self.centre_row - up / spacing_mm[0], self.centre_column + across / spacing_mm[1]

    def vial_centres(self, plate: Plate, spacing_mm: tuple[float, float]) -> tuple[Floats, Floats]:
        """Fractional (rows, columns) of the plate's vials, in the plate's order."""
        return self.to_image(
            np.array([v.x_mm for v in plate.vials]), np.array([v.y_mm for v in plate.vials]), spacing_mm
        )


@dataclass(frozen=True, slots=True)
class NotLocated:
    """The plate could not be placed: a value with a reason, not an error."""

    code: str  # "no-plate", "ambiguous", "too-few-vials", "image-too-small"
    reason: str


@dataclass(frozen=True, slots=True, eq=False)
class Region:
    """The voxels measured for one vial: clear of the wall, outliers (bubbles, artefacts) already left out."""

    label: str
    rows: Ints  # (voxels,)
    columns: Ints  # (voxels,)
    excluded: int  # voxels inside the margin that were left out as outliers
    visible: bool  # False: at the plate's position there is nothing like a vial
