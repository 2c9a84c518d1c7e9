"""Makes qa/trend/ewma_widths.json: the widths of EWMA charts with estimated baselines as a Chebyshev series.

python tests/bench/ewma_widths.py            # how far the series is from the solved widths, on 60 random points
python tests/bench/ewma_widths.py --write    # solve again and write the file (about a minute)
"""

import json
import sys
import time
from pathlib import Path

import numpy as np

from qa.trend.arl import ewma_limit_estimated
from qa.trend.budget import WEIGHT
from qa.trend.widths import DOMAIN, TABLE, width_of

COUNTS = (7, 6, 8)  # terms in ln(run length), 1 / runs, 1 / freedom


def nodes(count):
    return np.cos((np.arange(count) + 0.5) * np.pi / count)


def solve():
    places = [low + (high - low) * (nodes(n) + 1) / 2 for (low, high), n in zip(DOMAIN, COUNTS, strict=True)]
    series = np.array(
        [
            [[np.log(ewma_limit_estimated(np.exp(a), WEIGHT, 1 / b, 1 / c)) for c in places[2]] for b in places[1]]
            for a in places[0]
        ]
    )
    for axis, count in enumerate(COUNTS):
        basis = np.linalg.inv(np.polynomial.chebyshev.chebvander(nodes(count), count - 1))
        series = np.moveaxis(np.tensordot(basis, series, axes=(1, axis)), 0, axis)
    return series


def check(points=60, seed=3):
    rng = np.random.default_rng(seed)
    worst = []
    for _ in range(points):
        a, b, c = (rng.uniform(low, high) for low, high in DOMAIN)
        exact = ewma_limit_estimated(np.exp(a), WEIGHT, 1 / b, 1 / c)
        worst.append(float(width_of(np.exp(a), 1 / b, np.array([1 / c]))[0] / exact - 1))
    print(f"relative error of the width: median {np.median(np.abs(worst)):.1e}, largest {np.max(np.abs(worst)):.1e}")


if __name__ == "__main__":
    if "--write" in sys.argv:
        began = time.perf_counter()
        made = {
            "weight": WEIGHT,
            "domain": DOMAIN,
            "series": [[[float(f"{x:.9g}") for x in r] for r in p] for p in solve()],
        }
        Path(TABLE).write_text(json.dumps(made, separators=(",", ":")) + "\n", encoding="utf-8")
        print(f"written in {time.perf_counter() - began:.0f} s; run again without --write to check it")
    else:
        check()
