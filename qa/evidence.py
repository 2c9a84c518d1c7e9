"""The evidence kept with a measurement for its page: grey pictures with the vials marked, and fitted curves."""

from __future__ import annotations

import io
from collections.abc import Sequence

import numpy as np

from qa.fit.estimate import Estimate, Signals
from qa.intake.series import Series
from qa.locate.placement import Placement, Region
from qa.reading import Circle, Curve, Picture, Reading
from qa.site.plate import Plate
from qa.words import Pixels

LARGEST = 256  # pictures with more rows or columns are thinned: they show where, not what


def curves_of(signals: Signals, estimate: Estimate, labels: Sequence[str], scan: str) -> list[Curve]:
    """One curve per fitted vial, rounded to float32's digits: they are shown, never computed with."""
    spread = signals.noise / np.sqrt(signals.voxels)
    return [
        Curve(
            vial=label,
            scan=scan,
            times_ms=_short(signals.times_ms),
            signal=_short(signals.values[row]),
            fitted=_short(estimate.fitted[row]),
            residual=_short(estimate.residual[row]),
            noise=float(f"{spread[row]:.4g}"),
        )
        for row, label in enumerate(labels)
    ]


def picture_of(
    series: Series, regions: Sequence[Region], plate: Plate, placement: Placement | None, readings: Sequence[Reading]
) -> Picture:
    """A grey picture of the series (root mean square over its frames) with a circle for each vial."""
    image = np.sqrt(np.mean(np.square(series.frames, dtype=np.float32), axis=0))
    thin = max(1, -(-max(image.shape) // LARGEST))
    image = image[::thin, ::thin]
    states = {reading.vial: reading.state for reading in readings}
    circles = []
    if placement is not None:
        rows, columns = placement.vial_centres(plate, series.grid.spacing_mm)
        for index, region in enumerate(regions):
            radius = plate.vials[index].radius_mm * placement.scale / series.grid.spacing_mm[0]
            circles.append(
                Circle(
                    vial=region.label,
                    row=float(rows[index]) / thin,
                    column=float(columns[index]) / thin,
                    radius=radius / thin,
                    state=states[region.label],
                )
            )
    spacing = (series.grid.spacing_mm[0] * thin, series.grid.spacing_mm[1] * thin)
    return Picture(series.scan.name, image.shape[0], image.shape[1], spacing, _png(image), tuple(circles))


def _png(image: Pixels) -> bytes:
    from PIL import Image

    top = float(np.percentile(image, 99.7)) or 1.0
    grey = np.clip(image * (255.0 / top), 0, 255).astype(np.uint8)
    out = io.BytesIO()
    Image.fromarray(grey).save(out, format="PNG", compress_level=4)
    return out.getvalue()


def _short(values: np.ndarray) -> list[float]:
    return [float(f"{value:.6g}") for value in values]
