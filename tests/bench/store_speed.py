"""What a run costs in the book, however many are there, and how long reading and auditing ten years takes.

    python tests/bench/store_speed.py [--probe 25]

Three books hold 1, 500 and 2000 runs of 28 readings. Prints the cost of recording one more (with curves and pictures,
in a transaction that is safely on disk) and of opening the book and reading one run; the books take turns, so that a
busy machine weighs on all alike, and the medians are shown. Then `readings`, `runs` and `audit` of ten years of four
scanners scanned weekly. Limit: a run costs no more than 1.3 x in the largest book of what it costs in the smallest.
"""

from __future__ import annotations

import argparse
import statistics
import sys
import tempfile
import time
from collections.abc import Callable, Sized
from datetime import timedelta
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1] / "unit"))
from book_factory import START, fill, measurement, session

from qa.store import Book, open_book

VIALS = 14  # in two scans: 28 streams
SIZES = (1, 500, 2000)
SCANNERS = ("One", "Two", "Three", "Four")
YEARS = 10
EVIDENCE = measurement("probe", 0, VIALS, evidence=True)


def timed(work: Callable[[], Sized]) -> tuple[int, float, float]:
    """What came out (its length), seconds by the clock, and seconds of computing."""
    start, computing = time.perf_counter(), time.process_time()
    made = work()
    return len(made), time.perf_counter() - start, time.process_time() - computing


def record(book: Book, number: int) -> tuple[int]:
    """Record one run with its evidence."""
    one = session("Probe", "Plate A", START + timedelta(hours=number))
    return (book.record(one, EVIDENCE, method_fingerprint="m 1", reason="first ingest"),)


def ask(path: Path) -> Sized:
    """Open the book and read one run."""
    with open_book(path, create=False) as book:
        return book.readings(run=session("One", "Plate A", START).run)


def costs_per_run(folder: Path, probe: int) -> bool:
    """Print median milliseconds of recording and of asking, by number of stored runs; gives whether they are flat."""
    paths = {size: folder / f"{size}.sqlite" for size in SIZES}
    for size, path in paths.items():
        with open_book(path) as book:
            fill(book, scanners=("One",), weeks=size, vials=VIALS)
    books = {size: open_book(path) for size, path in paths.items()}
    spent: dict[str, dict[int, list[float]]] = {name: {size: [] for size in SIZES} for name in ("record", "ask")}
    for turn in range(probe + 1):
        for size, path in paths.items():
            costs = {
                "record": timed(lambda at=books[size], n=turn: record(at, n))[1],
                "ask": timed(lambda at=path: ask(at))[1],
            }
            if turn:  # the first one only warms up
                for name, cost in costs.items():
                    spent[name][size].append(1e3 * cost)
    for book in books.values():
        book.close()
    flat = True
    for name, by_size in spent.items():
        medians = {size: statistics.median(values) for size, values in by_size.items()}
        ratio = medians[SIZES[-1]] / medians[SIZES[0]]
        shown = ", ".join(f"{value:.1f} ms at {size}" for size, value in medians.items())
        print(f"{name}: {shown} stored runs; {ratio:.2f} x (limit 1.3 x)")
        flat = flat and ratio <= 1.3
    return flat


def ten_years(path: Path) -> None:
    """Print how long it takes to read and to audit ten years."""
    with open_book(path) as book:
        fill(book, scanners=SCANNERS, weeks=YEARS * 52, vials=VIALS)
        for name, work in {
            "readings": lambda: book.readings(),
            "readings of one scanner": lambda: book.readings(scanner="Two"),
            "runs": lambda: book.runs(),
            "ledger": lambda: book.ledger(),
            "audit": lambda: book.audit(),
        }.items():
            length, seconds, computing = sorted((timed(work) for _ in range(3)), key=lambda one: one[1])[1]
            print(f"{name}: {length} rows in {seconds:.2f} s ({computing:.2f} s of computing)")
    print(f"the file: {path.stat().st_size / 2**20:.0f} MiB for {YEARS * 52 * len(SCANNERS)} runs without pictures")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--probe", type=int, default=25)
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        flat = costs_per_run(Path(folder), asked.probe)
        ten_years(Path(folder) / "years.sqlite")
    print("within the limit" if flat else "OUTSIDE THE LIMIT")
    sys.exit(0 if flat else 1)


if __name__ == "__main__":
    main()
