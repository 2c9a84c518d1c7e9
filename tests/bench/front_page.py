"""The time of the front page for ten years of weekly runs on four scanners with 28 streams each.

python tests/bench/front_page.py [--years 10]
"""

import argparse
import sys
import tempfile
import time
from datetime import UTC, datetime, timedelta
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1] / "unit"))
from book_factory import Clock, fill

from qa.report import front, history
from qa.report.output import Output
from qa.report.pages import Facts
from qa.site import load_site
from qa.site.skeleton import make_site
from qa.store import open_book

SCANNERS = ("North bay", "South bay", "East bay", "West bay")


def site_of(folder):
    make_site(folder, "Bench")
    phantom = """[[phantom]]
name = "Plate A"
plate = "plates/plate.toml"
match = { PatientID = "A" }"""
    blocks = ["[site]", 'name = "Bench"', phantom]
    for name in SCANNERS:
        blocks.append(f'[[scanner]]\nname = "{name}"\nfield_t = 3.0\nmatch = {{ StationName = "{name}" }}')
        blocks.append(f'[[schedule]]\nscanner = "{name}"\nphantom = "Plate A"\nrecipe = "recipes/weekly.toml"')
    (folder / "site.toml").write_text("\n".join(blocks) + "\n", encoding="utf-8")
    return load_site(folder)


def main():
    parser = argparse.ArgumentParser()
    parser.add_argument("--years", type=float, default=10.0)
    weeks = round(parser.parse_args().years * 52)
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place) / "site"
        site = site_of(folder)
        start = datetime(2016, 1, 4, 7, tzinfo=UTC)
        clock = Clock(start)
        with open_book(site, clock=clock) as book:
            began = time.process_time()
            fill(book, scanners=SCANNERS, weeks=weeks, vials=14, clock=clock, start=start)
            print(f"filled with {weeks * 4} runs in {time.process_time() - began:.0f} s")
            today = (start + timedelta(weeks=weeks)).date()
            common = {"site": site.name, "today": today.isoformat(), "scanner_names": list(SCANNERS)}
            facts, output = Facts(book, site, today), Output(folder / "pages")
            for name, work in (
                ("readings", lambda: facts.readings),
                ("what has moved", lambda: facts.trend),
                ("scanners today", lambda: facts.scanners),
            ):
                began = time.process_time()
                work()
                print(f"  of it {name:<16} {time.process_time() - began:6.2f} s")
            facts = Facts(book, site, today)
            began = time.process_time()
            output.write("index.html", "front.html", common | front.content(facts))
            print(f"front page           {time.process_time() - began:6.2f} s (limit 5 s)")
            began = time.process_time()
            output.write("history.html", "history.html", common | history.content(facts))
            print(f"history page         {time.process_time() - began:6.2f} s")


if __name__ == "__main__":
    main()
