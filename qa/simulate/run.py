"""One simulated session, from truth to files."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from qa.errors import VialbookError
from qa.simulate import classic, enhanced
from qa.simulate.header import ScanData, uid
from qa.simulate.scene import images, lay, parts, records, repeat_of, times_of
from qa.simulate.truth import Form, RunRecord, RunTruth
from qa.site.plate import Plate
from qa.site.recipe import Recipe


def simulate_run(
    plate: Plate,
    recipe: Recipe,
    truth: RunTruth,
    folder: Path,
    *,
    seed: int,
    form: Form = "classic",
    write_truth: bool = False,
) -> RunRecord:
    """Write the DICOM files of one run into `folder`, and say what is true in them.

    The same arguments give the same bytes. With `write_truth`, the record is also written as
    ``<folder's name>.truth.json`` beside the folder, never inside it.

    Raises
    ------
    VialbookError
        If the truth lacks a vial of the plate, the folder cannot be written, or a recipe cannot be acquired.
    """
    lost = [vial.label for vial in plate.vials if vial.label not in {v.label for v in truth.vials}]
    if lost:
        raise VialbookError(f"the truth says nothing of vial {', '.join(lost)}", remedy="Give a VialTruth for each.")
    folder = Path(folder)
    rng = np.random.default_rng(seed)
    identity = (seed, truth.scanner.name, truth.acquired.isoformat(), form)
    study = uid(*identity, "study")
    layout = lay(plate, truth)
    paths: list[Path] = []
    for number, scan in enumerate(recipe.scans, start=1):
        times = times_of(scan, truth)
        if scan.name in truth.omitted or len(times) == 0:
            continue
        by_ti = scan.method in ("inversion-recovery", "saturation-recovery")
        frames = images(scan, truth, plate, layout, rng)
        for part, values in parts(frames, truth).items():
            data = ScanData(
                scan=scan,
                number=number,
                frames=values,
                ti_ms=tuple(float(t) for t in times) if by_ti else (None,) * len(times),
                te_ms=(truth.inversion_te_ms,) * len(times) if by_ti else tuple(float(t) for t in times),
                tr_ms=repeat_of(scan, truth),
                identity=identity,
                part=part,
            )
            try:
                if form == "enhanced":
                    paths += enhanced.write(folder, truth, data, study)
                else:
                    paths += classic.write(folder, truth, data, study, series_per_time=form == "classic")
            except OSError as error:
                raise VialbookError(f"cannot write a simulated run: {error}", str(folder)) from error
    record = RunRecord(
        folder=folder,
        files=tuple(paths),
        study_uid=study,
        seed=seed,
        form=form,
        truth=truth,
        spacing_mm=layout.spacing_mm,
        centre_row=(truth.matrix - 1) / 2 - truth.shift_mm[1] / layout.spacing_mm,
        centre_column=(truth.matrix - 1) / 2 + truth.shift_mm[0] / layout.spacing_mm,
        noise=1.0 / truth.scanner.snr,
        vials=records(plate, truth, layout),
    )
    if write_truth:
        beside = folder.parent / f"{folder.name}.truth.json"
        beside.write_text(json.dumps(record.as_json(), indent=1) + "\n", encoding="utf-8")
    return record
