"""Time of taking runs in, against pydicom alone reading the same pixel data (dcmread and pixel_array).

    python tests/bench/ingest_speed.py [--runs 6] [--matrix 256] [--repeat 5]

Prints, per form of file: pydicom alone; intake (hash, archive, headers, calibrated frames); and the whole of ingest
without pages, in a new site folder each time. Each figure is the median over the repeats, which take turns, so that a
busy machine weighs on all alike. Limits: intake 1.3 x, ingest 2 x + 0.5 s.
"""

from __future__ import annotations

import argparse
import shutil
import statistics
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pydicom

sys.path.insert(0, str(Path(__file__).parents[1] / "unit"))
from intake_site import PLATE, RECIPE, make_site, truth

from qa import intake
from qa.pipeline import ingest
from qa.simulate import simulate_run
from qa.simulate.truth import Form
from qa.site import Site


def timed(work: Callable[[], object]) -> float:
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def alone(folder: Path) -> int:
    """What pydicom needs for the same pixel data."""
    return sum(pydicom.dcmread(path).pixel_array.size for path in sorted(folder.rglob("*.dcm")))


def only_intake(folder: Path, site: Site) -> int:
    """Files to calibrated series."""
    taken = intake.gather([folder], site, known=())
    return sum(len(one.frames) for session in taken.sessions for one in intake.load(session, RECIPE).series)


def whole(folder: Path, site: Site) -> int:
    """Files to a judged book."""
    return ingest(site, [folder], celsius=20.0, report=False).used


def compare(folder: Path, form: Form, runs: int, matrix: int, repeat: int) -> bool:
    """Print the figures of one form; gives whether they are within the limits."""
    for number in range(runs):
        one = replace(truth(), matrix=matrix)
        simulate_run(PLATE, RECIPE, one, folder / "in" / str(number), seed=number, form=form)
    spent: dict[str, list[float]] = {"pydicom": [], "intake": [], "ingest": []}
    for turn in range(repeat + 1):
        homes = [folder / f"home-{turn}-{kind}" for kind in ("intake", "ingest")]
        sites = [make_site(home) for home in homes]
        times = [
            timed(lambda: alone(folder / "in")),
            timed(lambda at=sites[0]: only_intake(folder / "in", at)),
            timed(lambda at=sites[1]: whole(folder / "in", at)),
        ]
        for home in homes:
            shutil.rmtree(home)
        if turn:  # the first one only warms up
            for kind, value in zip(spent, times, strict=True):
                spent[kind].append(value)
    base, taking, all_of_it = (statistics.median(values) for values in spent.values())
    files = sum(1 for _ in (folder / "in").rglob("*.dcm"))
    print(f"{form}: {runs} runs, {files} files of {matrix} x {matrix}")
    print(f"  pydicom alone {base:.3f} s ({1e3 * base / files:.2f} ms a file)")
    print(f"  intake        {taking:.3f} s, {taking / base:.2f} x (limit 1.3 x)")
    print(f"  ingest        {all_of_it:.3f} s, {all_of_it / base:.2f} x; limit 2 x + 0.5 s = {2 * base + 0.5:.3f} s")
    return taking <= 1.3 * base and all_of_it <= 2 * base + 0.5


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--runs", type=int, default=6)
    parser.add_argument("--matrix", type=int, default=256)
    parser.add_argument("--repeat", type=int, default=5)
    asked = parser.parse_args()
    within = []
    for form in ("classic", "one-series", "enhanced"):
        folder = Path(tempfile.mkdtemp(prefix="speed-"))
        within.append(compare(folder, form, asked.runs, asked.matrix, asked.repeat))
        shutil.rmtree(folder)
    print("within the limits" if all(within) else "OUTSIDE THE LIMITS")
    sys.exit(0 if all(within) else 1)


if __name__ == "__main__":
    main()
