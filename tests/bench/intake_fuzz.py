"""Spoils valid simulated files and feeds them to intake: counts uncaught exceptions and lost files (both must be 0).

    python tests/bench/intake_fuzz.py [cases] [--seed N] [--keep FOLDER]

Each case is one spoilt file, gathered, loaded and given to `locate`. Files that raise are kept in FOLDER. Prints what
became of the cases, the slowest ones, and the memory that the process ever used.
"""

from __future__ import annotations

import argparse
import resource
import shutil
import sys
import tempfile
import time
import traceback
import warnings
from collections import Counter
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "unit"))
from intake_mutations import mutated
from intake_site import PLATE, RECIPE, make_site, run

from qa import intake
from qa.locate import locate

KINDS = {
    "classic": {},
    "one series": {"form": "one-series", "scaling": "slope-per-frame"},
    "private": {"scaling": "private-slope", "private_creator": "INVENTED MR IMAGING DD 001"},
    "real": {"written": "real"},
    "enhanced": {"form": "enhanced"},
    "enhanced, slopes": {"form": "enhanced", "scaling": "slope-per-frame"},
    "enhanced, complex": {"form": "enhanced", "written": "real-imaginary"},
}


def one_case(site: object, path: Path, fate: Counter[str]) -> str:
    """Take one file in; gives what was wrong, or nothing."""
    taken = intake.gather([path], site, known=())
    used = sum(len(session.files) for session in taken.sessions)
    if taken.seen != 1 or used + taken.duplicates + len(taken.held) != 1:
        return f"lost: seen {taken.seen}, used {used}, duplicate {taken.duplicates}, held {len(taken.held)}"
    for held in taken.held:
        fate[held.code] += 1
    for session in taken.sessions:
        loaded = intake.load(session, RECIPE)
        for held in loaded.held:
            fate[held.code] += 1
        for series in loaded.series:
            if not np.isfinite(series.frames).all():
                return "frames that are not finite"
            locate(series.frames, series.grid.spacing_mm, PLATE)
        if not loaded.held:
            fate["used" if loaded.series else "in no scan"] += 1
    return ""


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("cases", nargs="?", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--keep", type=Path, help="folder for files that raise")
    asked = parser.parse_args()
    work = Path(tempfile.mkdtemp(prefix="fuzz-"))
    site = make_site(work / "site")
    originals = [p.read_bytes() for name, kind in KINDS.items() for p in run(work / name, **kind).files[::4]]
    fate: Counter[str] = Counter()
    failures: Counter[str] = Counter()
    slow: list[tuple[float, int, str]] = []
    start = time.perf_counter()
    warnings.simplefilter("ignore")
    for number in range(asked.cases):
        how, content = mutated(originals, np.random.default_rng([asked.seed, number]))
        path = work / "case.dcm"
        path.write_bytes(content)
        began = time.perf_counter()
        try:
            wrong = one_case(site, path, fate)
        except Exception as error:  # noqa: BLE001  # this is what is counted
            where = traceback.extract_tb(error.__traceback__)[-1]
            wrong = f"{type(error).__name__} in {Path(where.filename).name}:{where.lineno}: {str(error)[:80]}"
        slow.append((time.perf_counter() - began, number, how))
        if wrong:
            failures[wrong] += 1
            print(f"case {number} ({how}): {wrong}")
            if asked.keep:
                asked.keep.mkdir(parents=True, exist_ok=True)
                shutil.copy(path, asked.keep / f"{asked.seed}-{number}.dcm")
        if number % 500 == 499:
            shutil.rmtree(site.archive, ignore_errors=True)
    spent = time.perf_counter() - start
    shutil.rmtree(work)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{asked.cases} cases in {spent:.0f} s, peak memory {peak:.0f} MiB")
    print("ended:", ", ".join(f"{code} {count}" for code, count in fate.most_common()))
    print("slowest:", "; ".join(f"{s:.2f} s case {n} ({how})" for s, n, how in sorted(slow, reverse=True)[:4]))
    print(f"uncaught exceptions or lost files: {sum(failures.values())}")
    sys.exit(1 if failures else 0)


if __name__ == "__main__":
    main()
