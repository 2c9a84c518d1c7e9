"""A small site folder and small simulated runs for the tests of intake, simulator and fuzzing.

One plate of six vials, two scanners, two phantoms, a recipe of five inversion times and six echoes, 48 x 48 voxels.
"""

from __future__ import annotations

import shutil
from collections.abc import Mapping
from dataclasses import replace
from datetime import UTC, datetime
from functools import cache
from pathlib import Path

import numpy as np
import pydicom
from pydicom.dataset import Dataset

from qa.simulate import RunTruth, ScannerTruth, simulate_run, vials_of
from qa.simulate.truth import Form, RunRecord
from qa.site import Plate, Recipe, Scan, Site, Vial, load_site

TI_MS = (40.0, 200.0, 500.0, 1100.0, 2600.0)
TE_MS = (12.0, 24.0, 36.0, 48.0, 60.0, 72.0)
POINTS = [(40.0, 8.0), (12.0, 42.0), (-30.0, 34.0), (-44.0, -6.0), (-8.0, -4.0), (18.0, -36.0)]
PLATE = Plate(
    name="six",
    vials=tuple(Vial(label=str(k + 1), x_mm=x, y_mm=y, radius_mm=11.0) for k, (x, y) in enumerate(POINTS)),
)
IR = Scan(
    name="T1 IR", quantity="T1", method="inversion-recovery", match={"SeriesDescription": "QA IR.*"},
    ti_ms=TI_MS, tr_ms=5000.0,
)  # fmt: skip
TRAIN = Scan(
    name="T2 train", quantity="T2", method="spin-echo-train", match={"SeriesDescription": "QA ME.*"},
    te_ms=TE_MS, tr_ms=3000.0,
)  # fmt: skip
RECIPE = Recipe(name="short", scans=(IR, TRAIN))
SCANNERS = {"North": "SIM-1", "South": "SIM-2"}
PHANTOMS = {"Plate A": "QA-A", "Plate B": "QA-B"}
FILES = {"classic": len(TI_MS) + len(TE_MS), "one-series": len(TI_MS) + len(TE_MS), "enhanced": 2}


def site_text(scanners: Mapping[str, str] = SCANNERS, phantoms: Mapping[str, str] = PHANTOMS) -> str:
    """A site.toml that joins every scanner with every phantom."""
    blocks = ['[site]\nname = "Test"\ntimezone = "Europe/Oslo"\ndatabase = "sqlite:///book.sqlite"\n']
    for name, serial in scanners.items():
        blocks.append(f'[[scanner]]\nname = "{name}"\nfield_t = 3.0\nmatch = {{ DeviceSerialNumber = "{serial}" }}\n')
    for name, patient in phantoms.items():
        blocks.append(f'[[phantom]]\nname = "{name}"\nplate = "plate.toml"\nmatch = {{ PatientID = "{patient}" }}\n')
    blocks += [
        f'[[schedule]]\nscanner = "{scanner}"\nphantom = "{phantom}"\nrecipe = "recipe.toml"\n'
        for scanner in scanners
        for phantom in phantoms
    ]
    return "\n".join(blocks)


def make_site(folder: Path, **tables: Mapping[str, str]) -> Site:
    """Write a site folder and read it. `scanners` and `phantoms` stand in for the usual ones."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "site.toml").write_text(site_text(**tables), encoding="utf-8")
    vials = "".join(
        f'[[vial]]\nlabel = "{v.label}"\nx_mm = {v.x_mm}\ny_mm = {v.y_mm}\nradius_mm = {v.radius_mm}\n'
        for v in PLATE.vials
    )
    (folder / "plate.toml").write_text(f'[plate]\nname = "six"\n{vials}', encoding="utf-8")
    scans = "".join(
        f'[[scan]]\nname = "{s.name}"\nquantity = "{s.quantity}"\nmethod = "{s.method}"\n'
        f'match = {{ SeriesDescription = "{s.match["SeriesDescription"]}" }}\n'
        f"ti_ms = {list(s.ti_ms)}\nte_ms = {list(s.te_ms)}\ntr_ms = {s.tr_ms}\n"
        for s in RECIPE.scans
    )
    (folder / "recipe.toml").write_text(f'[recipe]\nname = "short"\n{scans}', encoding="utf-8")
    return load_site(folder)


def truth(scanner: str = "North", phantom: str = "Plate A", **changes: object) -> RunTruth:
    """What is true in a small run; `changes` are fields of RunTruth, or of its scanner."""
    made = ScannerTruth(scanner, 3.0, facts={"DeviceSerialNumber": SCANNERS.get(scanner, scanner)}, snr=200.0)
    of_scanner = {key: changes.pop(key) for key in list(changes) if hasattr(made, key)}
    whole = RunTruth(
        replace(made, **of_scanner),
        vials(),
        datetime(2026, 3, 2, 7, 30, tzinfo=UTC),
        phantom_facts={"PatientID": PHANTOMS.get(phantom, phantom)},
        matrix=48,
        field_of_view_mm=144.0,
        rotation_deg=17.0,
        shift_mm=(2.0, -1.5),
    )
    return replace(whole, **changes)


@cache
def vials() -> tuple:
    """Six vials with T1 from 200 to 1700 ms and T2 from 30 to 170 ms."""
    return tuple(replace(v, t1_ms=200.0 + 300.0 * k, t2_ms=30.0 + 28.0 * k) for k, v in enumerate(vials_of(PLATE, 3.0)))


def run(
    folder: Path, form: Form = "classic", *, recipe: Recipe = RECIPE, seed: int = 5, **changes: object
) -> RunRecord:
    """A simulated run in `folder`."""
    return simulate_run(PLATE, recipe, truth(**changes), folder, seed=seed, form=form)


def copied(record: RunRecord, folder: Path) -> RunRecord:
    """The same run in another folder: quicker than simulating it again."""
    shutil.copytree(record.folder, folder)
    return replace(record, folder=folder, files=tuple(folder / p.relative_to(record.folder) for p in record.files))


def edit(path: Path, **values: object) -> Path:
    """Change top-level elements of a file in place; None removes one."""
    dataset = pydicom.dcmread(path)
    change(dataset, **values)
    dataset.save_as(path)
    return path


def change(dataset: Dataset, **values: object) -> None:
    """Set elements by keyword; None removes one."""
    for keyword, value in values.items():
        if value is None:
            if keyword in dataset:
                delattr(dataset, keyword)
        else:
            setattr(dataset, keyword, value)


def pixels_of(paths: tuple[Path, ...] | list[Path]) -> dict[str, np.ndarray]:
    """What pydicom itself reads: stored values by SOP Instance UID."""
    return {str(ds.SOPInstanceUID): ds.pixel_array for ds in (pydicom.dcmread(path) for path in paths)}
