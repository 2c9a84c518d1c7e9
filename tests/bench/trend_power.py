"""False alarms against the promise, and how soon and how rightly true changes are named, on simulated campaigns.

python tests/bench/trend_power.py            # 200 campaigns of each kind (about ten minutes)
python tests/bench/trend_power.py 20 step    # 20 campaigns of one kind: stable, slope, step or vial

A campaign is two years of weekly runs of 14 vials in two scans on four scanners that share one phantom; 3 % of the
runs are missing, vials scatter by 0.4 to 0.9 %, and runs as a whole by 0.2 %.
"""

import sys
import time
from collections import Counter
from datetime import date, timedelta
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "unit"))

import histories
import numpy as np

from qa.site.limits import LimitBlock
from qa.trend import find, judge
from qa.words import Verdict

LIMITS = (LimitBlock(since=date(2020, 1, 1), watch_percent=3.0, act_percent=5.0),)
SCANNERS = ("North bay", "South bay", "East bay", "West bay")
MOVED, VIAL = 1, 4  # the scanner or vial that changes
START = date(2024, 1, 1)
RUNS = 104
BASELINE = 8


def campaign(seed, shift=None):
    return histories.history(
        histories.Campaign(scanners=SCANNERS, runs=RUNS, missing=0.03, jitter_days=2.0, shift=shift, seed=seed)
    )


def alarms(judged, verdicts):
    """Runs with such a verdict, and episodes of them (runs in a row count once), over all scanners of a list."""
    runs = episodes = judged_runs = 0
    last = {}
    for one in judged:
        if any("Baseline being learnt" in reason for reason in one.reasons):
            continue
        here = one.verdict in verdicts
        judged_runs += 1
        runs += here
        episodes += here and not last.get(one.scanner, False)
        last[one.scanner] = here
    return runs, episodes, judged_runs


def stable(campaigns):
    watch = act = watch_runs = act_runs = judged_runs = 0
    raised, reasons = set(), Counter()
    for seed in range(campaigns):
        history = campaign(seed)
        judged = list(judge(history, None, LIMITS).values())
        runs, episodes, total = alarms(judged, {Verdict.WATCH, Verdict.ACT})
        watch, watch_runs, judged_runs = watch + episodes, watch_runs + runs, judged_runs + total
        runs, episodes, _ = alarms(judged, {Verdict.ACT})
        act, act_runs = act + episodes, act_runs + runs
        for one in judged:
            if one.verdict is not Verdict.STEADY:
                reasons[kind_of(one.reasons[0])] += 1
        for weeks in range(13, RUNS + 1, 13):  # looked at once a quarter
            today = START + timedelta(days=7 * weeks)
            found = find(history, None, LIMITS, today=today).findings
            raised |= {
                (seed, one.finding, one.kind) for one in found if one.state == "open" and one.verdict != "steady"
            }
    years = judged_runs * 7.0 / 365.25
    print(f"stable: {campaigns} campaigns, {years:.0f} scanner-years judged")
    print(f"  watch or act, episodes a scanner-year  {watch / years:.2f} +- {watch**0.5 / years:.2f}  (promised 1)")
    print(f"  act, episodes a scanner-year           {act / years:.3f}  (promised 0.25)")
    print(f"  runs not steady                        {100 * watch_runs / judged_runs:.2f} %, act {act_runs}")
    print(f"  by first reason                        {dict(reasons)}")
    kinds = Counter(kind for _, _, kind in raised)
    print(f"  findings ever open, a scanner-year     {len(raised) / years:.3f}  {dict(kinds)}")


def kind_of(reason):
    """The kind of a reason, by its wording."""
    known = ("of the whole scanner has moved", "further than single runs", "moves apart", "beyond the", "No usable")
    for words in known:
        if words in reason:
            return words
    return reason


def changing(name, campaigns, shift_at, wanted_kind, wanted_cause, truth):
    """`shift_at(day)` gives the change from that day on; `truth` its size (step) or rate (slope), percent."""
    tally, delays, days_off, errors = Counter(), [], [], []
    wrong = Counter()
    for seed in range(campaigns):
        onset_day = float(np.random.default_rng(seed).uniform(26 * 7, 60 * 7))
        history = campaign(1000 + seed, shift_at(onset_day))
        onset = START + timedelta(days=onset_day)
        judged = judge(history, None, LIMITS)
        concerned = [SCANNERS[MOVED]] if wanted_cause == "scanner" else list(SCANNERS)
        when = dict(zip(history["run"], history["acquired"].dt.date, strict=True))
        alarm_days = [
            (when[run] - onset).days
            for run, one in judged.items()
            if one.scanner in concerned and one.verdict is not Verdict.STEADY and when[run] >= onset
        ]
        delays.append(min(alarm_days, default=10_000) / 7.0)
        found = find(history, None, LIMITS, today=START + timedelta(days=7 * RUNS)).findings
        for quantity in ("T1", "T2"):
            about = [one for one in found if one.quantity == quantity and right_place(one, wanted_cause)]
            about = [one for one in about if one.kind in ("step", "slope") and abs(one.size_percent) > 0.2 * abs(truth)]
            tally["asked"] += 1
            if not about:
                tally["missed"] += 1
                continue
            best = max(about, key=lambda one: abs(one.size_percent))
            tally["found"] += 1
            tally["cause"] += best.cause == wanted_cause
            tally["kind"] += best.kind == wanted_kind
            low, high = best.onset_interval
            tally["dated"] += low <= onset + timedelta(days=7) and onset - timedelta(days=7) <= high
            days_off.append(abs((best.onset - onset).days))
            tally["alone"] += len(about) == 1
            size = best.percent_per_year if wanted_kind == "slope" else best.size_percent
            interval = best.rate_interval if wanted_kind == "slope" else best.size_interval
            if best.kind == wanted_kind:
                errors.append(size - truth)
                tally["sized"] += interval[0] <= truth <= interval[1]
        for one in found:
            if one.kind in ("step", "slope") and not right_place(one, wanted_cause) and one.state == "open":
                wrong[f"{one.kind}, cause {one.cause}"] += 1
    asked = tally["asked"]
    print(f"{name}: {campaigns} campaigns")
    weeks = np.percentile(delays, [50, 90])
    print(f"  runs judged not steady after           {weeks[0]:.0f} weeks (median), {weeks[1]:.0f} (90 %)")
    for words in ("found", "cause", "kind", "dated", "sized", "alone"):
        print(f"  {words:38s} {100 * tally[words] / asked:.1f} %")
    print(f"  onset off by                           {np.median(days_off):.0f} days (median)")
    print(f"  size off by                            {np.std(errors):.2f} % (SD), {np.mean(errors):+.2f} % (mean)")
    print(f"  findings elsewhere, a scanner-year     {sum(wrong.values()) / campaigns / 8.0:.3f}  {dict(wrong)}")


def right_place(one, cause):
    if cause == "scanner":
        return one.scanner == SCANNERS[MOVED] and len(one.vials) > 1
    return one.vials == (str(VIAL + 1),)


def main():
    numbers = [int(word) for word in sys.argv[1:] if word.isdecimal()]
    chosen = [word for word in sys.argv[1:] if not word.isdecimal()] or ["stable", "slope", "step", "vial"]
    campaigns = numbers[0] if numbers else 200
    for name in chosen:
        began = time.perf_counter()
        if name == "stable":
            stable(campaigns)
        elif name == "slope":
            scanner_slope = lambda day: histories.slope(3.0, day, scanner=MOVED)  # noqa: E731
            changing("+3 % a year on one scanner", campaigns, scanner_slope, "slope", "scanner", 3.0)
        elif name == "step":
            scanner_step = lambda day: histories.step(day, 4.0, scanner=MOVED)  # noqa: E731
            changing("a step of 4 % on one scanner", campaigns, scanner_step, "step", "scanner", 4.0)
        else:
            ageing = lambda day: histories.slope(-3.0, day, vial=VIAL)  # noqa: E731
            changing("a vial that ages by 3 % a year", campaigns, ageing, "slope", "vial", -3.0)
        print(f"  ({time.perf_counter() - began:.0f} s)")


if __name__ == "__main__":
    main()
