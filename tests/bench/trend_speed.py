"""How long judging and finding take on ten years of four scanners, 28 streams each, measured weekly.

python tests/bench/trend_speed.py            # the figures
python tests/bench/trend_speed.py --profile  # and where the time goes
"""

import cProfile
import pstats
import sys
import time
from datetime import date
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "unit"))

import histories

from qa.compare import agree
from qa.site.limits import LimitBlock
from qa.trend import find, judge

LIMITS = (LimitBlock(since=date(2020, 1, 1), watch_percent=3.0, act_percent=5.0),)
CAMPAIGN = histories.Campaign(
    scanners=("North bay", "South bay", "East bay", "West bay"),
    runs=520,
    missing=0.02,
    shift=histories.slope(1.0, 2500.0, scanner=1),
)


def best_of(work, times=5):
    taken = []
    for _ in range(times):
        began = time.perf_counter()
        work()
        taken.append(time.perf_counter() - began)
    return min(taken)


def main():
    history = histories.history(CAMPAIGN)
    own = history[history["scanner"] == "South bay"]
    newest = [str(own["run"].iloc[-1])]
    jobs = {
        "judge the newest run, history of its scanner (goal < 0.1 s)": lambda: judge(own, None, LIMITS, runs=newest),
        "judge the newest run, history of all scanners": lambda: judge(history, None, LIMITS, runs=newest),
        "judge every run": lambda: judge(history, None, LIMITS),
        "find, all scanners (goal < 1 s)": lambda: find(history, None, LIMITS, today=date(2035, 1, 1)),
        "agree, all scanners": lambda: agree(history),
    }
    print(f"{len(history)} readings of {history['run'].nunique()} runs")
    for name, work in jobs.items():
        work()
        print(f"{best_of(work):8.3f} s  {name}")
        if "--profile" in sys.argv:
            profile = cProfile.Profile()
            profile.runcall(work)
            pstats.Stats(profile).sort_stats("cumulative").print_stats(25)


if __name__ == "__main__":
    main()
