"""Simulated runs from files to readings: how far T1 and T2 are from the truth, and whether their uncertainties hold.

    python tests/bench/accuracy.py [--runs 30] [--seed 1] [--detail]
    python tests/bench/accuracy.py --efficiency 5000

The first writes runs of random scanners, pulses, plates and placements and measures them as an ingest does: median,
95th percentile and worst |error| of T1, of T2 from separate echoes and of T2 from a train, and the share of readings
whose truth lies within k = 2. The second prints the scatter of many noise trials over the Cramér-Rao bound.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
import time
from collections import defaultdict
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "unit"))
from fit_signals import CASES, efficiency

from qa import intake
from qa.measure import measure
from qa.reading import Reading
from qa.simulate import Inversion, PulsePair, RunTruth, ScannerTruth, VialTruth, simulate_run
from qa.site import Plate, Recipe, Scan, Vial, load_site
from qa.temperature import RunTemperature

TI_MS = (35.0, 80.0, 150.0, 270.0, 450.0, 700.0, 1100.0, 1700.0, 2500.0, 3600.0)
SINGLE_TE_MS = (12.0, 25.0, 45.0, 80.0, 140.0, 240.0)
PULSES = (
    PulsePair(),
    PulsePair("sinc", "sinc", 4.0, 1.6),
    PulsePair("hann-sinc", "hann-sinc", 3.0, 1.2),
    PulsePair("gaussian", "gaussian", 2.0, 1.3),
    PulsePair("gaussian", "sinc", 4.0, 1.0),
    PulsePair("sinc", "gaussian", 3.0, 1.5),
    PulsePair("hamming-sinc", "hamming-sinc", 6.0, 1.0),
    PulsePair("hard", "hard"),
)
MATRICES = (64, 96, 128)


@dataclass
class Tally:
    """Errors in percent and in standard uncertainties, over all readings of one kind."""

    percent: list[float] = field(default_factory=list)
    over_u: list[float] = field(default_factory=list)
    without: int = 0

    def line(self, name: str) -> str:
        """One row of the table."""
        size = np.abs(self.percent)
        inside = 100 * np.mean(np.abs(self.over_u) <= 2.0)
        return (
            f"{name:34s} {len(size):6d} {self.without:6d} {np.median(size):8.2f} {np.percentile(size, 95):8.2f} "
            f"{size.max():8.2f} {np.mean(self.percent):8.2f} {inside:8.1f}"
        )


HEADER = (
    f"{'':34s} {'number':>6s} {'none':>6s} {'median %':>8s} {'p95 %':>8s} {'worst %':>8s} {'mean %':>8s} {'k=2 %':>8s}"
)


def plate_of(rng: np.random.Generator) -> Plate:
    """Twelve vials at random places, no two nearer than 2 mm."""
    vials: list[Vial] = []
    while len(vials) < 12:
        x, y, radius = *rng.uniform(-68, 68, 2), rng.uniform(8.0, 11.0)
        if np.hypot(x, y) < 72 and all(np.hypot(x - v.x_mm, y - v.y_mm) > radius + v.radius_mm + 2.0 for v in vials):
            vials.append(Vial(label=str(len(vials) + 1), x_mm=x, y_mm=y, radius_mm=radius))
    return Plate(name="random", vials=tuple(vials))


def truth_of(plate: Plate, rng: np.random.Generator) -> RunTruth:
    """A scanner, a session and the vials' relaxation times."""
    scanner = ScannerTruth(
        "North",
        3.0,
        facts={"DeviceSerialNumber": "SIM-1"},
        pulses=PULSES[rng.integers(len(PULSES))],
        inversion=Inversion(rng.uniform(0.9, 1.0), bool(rng.random() < 0.7), rng.uniform(0.0, 2.0)),
        transmit_level=rng.uniform(0.9, 1.08),
        transmit_bow=rng.uniform(-0.1, 0.05),
        transmit_tilt=(rng.uniform(-0.04, 0.04), rng.uniform(-0.04, 0.04)),
        receive_bow=rng.uniform(-0.3, 0.1),
        receive_tilt=(rng.uniform(-0.15, 0.15), rng.uniform(-0.15, 0.15)),
        snr=float(np.exp(rng.uniform(np.log(60), np.log(250)))),
        filtering=float(rng.choice([0.0, 0.0, 0.46])),
    )
    vials = []
    for vial in plate.vials:
        t1 = float(np.exp(rng.uniform(np.log(110), np.log(2400))))
        t2 = t1 * float(np.exp(rng.uniform(np.log(0.05), np.log(0.5))))
        vials.append(VialTruth(vial.label, t1, float(np.clip(t2, 10.0, 600.0)), density=rng.uniform(0.85, 1.0)))
    return RunTruth(
        scanner,
        tuple(vials),
        datetime(2026, 3, 2, 7, 30, tzinfo=UTC),
        phantom_facts={"PatientID": "QA-A"},
        matrix=int(rng.choice(MATRICES)),
        rotation_deg=rng.uniform(-180, 180),
        shift_mm=(rng.uniform(-8, 8), rng.uniform(-8, 8)),
        flipped=bool(rng.random() < 0.5),
    )


def recipe_of(rng: np.random.Generator) -> Recipe:
    """T1, a train of random spacing and length, and separate echoes."""
    spacing, echoes = float(rng.choice([8.0, 10.0, 12.0, 15.0])), int(rng.choice([12, 16, 24, 32]))
    train_ms = tuple(spacing * (k + 1) for k in range(echoes))
    scans = (
        Scan(name="T1", quantity="T1", method="inversion-recovery", match=described("T1"), ti_ms=TI_MS, tr_ms=5000),
        Scan(
            name="train", quantity="T2", method="spin-echo-train", match=described("train"), te_ms=train_ms, tr_ms=3000
        ),
        Scan(
            name="single",
            quantity="T2",
            method="spin-echo-multi-te",
            match=described("single"),
            te_ms=SINGLE_TE_MS,
            tr_ms=4000,
        ),
    )
    return Recipe(name="bench", scans=scans)


def described(name: str) -> dict[str, str]:
    """What a scan's files are told by."""
    return {"SeriesDescription": f"QA {name}"}


def one_run(folder: Path, seed: int, tallies: dict[str, Tally], detail: bool) -> None:
    """Simulate, take in and measure one run; add its errors to the tallies."""
    rng = np.random.default_rng(seed)
    plate, recipe = plate_of(rng), recipe_of(rng)
    truth = truth_of(plate, rng)
    record = simulate_run(plate, recipe, truth, folder / "run", seed=seed, form="one-series")
    site = write_site(folder / "site", plate)
    session = intake.gather([record.folder], site, known=()).sessions[0]
    loaded = intake.load(session, recipe)
    result = measure(loaded.series, plate, 3.0, RunTemperature.measured(20.0, "bench"), loaded.remarks)
    true = {vial.label: vial for vial in record.vials}
    told = defaultdict(list)
    for reading in result.readings:
        right = true[reading.vial].t1_ms if reading.quantity == "T1" else true[reading.vial].t2_ms
        for name in (reading.scan, f"{reading.scan}, {truth.matrix} x {truth.matrix}"):
            if reading.value_ms is None or reading.u_ms is None:
                tallies[name].without += 1
                continue
            tallies[name].percent.append(100 * (reading.value_ms / right - 1))
            tallies[name].over_u.append((reading.value_ms - right) / reading.u_ms)
        if reading.value_ms is not None and reading.budget is not None:
            told[reading.scan].append((100 * (reading.value_ms / right - 1), reading, right))
    if detail:
        tell(seed, truth, recipe, told)


def tell(seed: int, truth: RunTruth, recipe: Recipe, told: dict[str, list[tuple[float, Reading, float]]]) -> None:
    """One line for the run, one for each scan, and one for each reading that is off."""
    scanner, pulses, echoes = truth.scanner, truth.scanner.pulses, recipe.scans[1].te_ms
    print(
        f"run {seed}: {truth.matrix}, snr {scanner.snr:.0f}, transmit {scanner.transmit_level:.2f}, "
        f"{pulses.excitation}/{pulses.refocusing} {pulses.lobes:g} x{pulses.refocusing_width:g}, "
        f"TE {echoes[0]:g} x {len(echoes)}, filter {scanner.filtering}"
    )
    for name, rows in told.items():
        size, mean = [abs(error) for error, _, _ in rows], np.mean([error for error, _, _ in rows])
        print(f"  {name:8s} median {np.median(size):5.2f} worst {max(size):5.2f} mean {mean:5.2f}")
        for error, reading, right in rows:
            over_u, parts, to = (reading.value_ms - right) / reading.u_ms, reading.budget, 100 / right
            if abs(error) > 2.0 or abs(over_u) > 2.5:
                print(
                    f"     vial {reading.vial:>2s} {right:7.1f} ms: {error:6.2f} % = {over_u:5.1f} u; "
                    f"noise {to * parts.noise_ms:.2f} model {to * parts.model_ms:.2f} "
                    f"region {to * parts.region_ms:.2f} voxels {reading.voxels} {reading.state}"
                )


def write_site(folder: Path, plate: Plate) -> object:
    """A site folder that knows the scanner and the phantom."""
    folder.mkdir(parents=True)
    (folder / "site.toml").write_text(
        '[site]\nname = "Bench"\ntimezone = "UTC"\ndatabase = "sqlite:///book.sqlite"\n'
        '[[scanner]]\nname = "North"\nfield_t = 3.0\nmatch = { DeviceSerialNumber = "SIM-1" }\n'
        '[[phantom]]\nname = "Plate A"\nserial = "A"\nplate = "plate.toml"\nmatch = { PatientID = "QA-A" }\n',
        encoding="utf-8",
    )
    rows = "".join(
        f'[[vial]]\nlabel = "{v.label}"\nx_mm = {v.x_mm}\ny_mm = {v.y_mm}\nradius_mm = {v.radius_mm}\n'
        for v in plate.vials
    )
    (folder / "plate.toml").write_text(f'[plate]\nname = "random"\n{rows}', encoding="utf-8")
    return load_site(folder)


def main() -> None:
    """Read the options and print a table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--runs", type=int, default=30)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--detail", action="store_true", help="one line for each run, and each reading that is off")
    parser.add_argument("--efficiency", type=int, metavar="TRIALS", help="print scatter over the Cramér-Rao bound")
    options = parser.parse_args()
    if options.efficiency:
        print(f"{'case':44s} {'scatter / bound':>16s} {'bias / scatter':>16s} {'u stated / scatter':>20s}")
        for case in CASES:
            scatter, bias, stated = efficiency(case, options.efficiency, seed=options.seed)
            print(f"{case.name:44s} {scatter:16.3f} {bias:16.3f} {stated:20.3f}")
        return
    tallies: dict[str, Tally] = defaultdict(Tally)
    start = time.perf_counter()
    for run in range(options.runs):
        with tempfile.TemporaryDirectory() as folder:
            one_run(Path(folder), options.seed + run, tallies, options.detail)
    print(f"{options.runs} runs, seeds from {options.seed}, {time.perf_counter() - start:.0f} s")
    print(HEADER)
    for name in sorted(tallies):
        print(tallies[name].line(name))


if __name__ == "__main__":
    main()
