"""Frames that nobody would write by hand: judging, finding and comparing give an answer, and a document, for each."""

import json
import warnings
from datetime import date

import histories
import numpy as np
import pytest

from qa.compare import agree
from qa.site.limits import LimitBlock
from qa.trend import find, judge

LIMITS = (
    LimitBlock(since=date(2020, 1, 1), watch_percent=3.0, act_percent=5.0),
    LimitBlock(since=date(2020, 1, 1), watch_percent=4.0, act_percent=6.0, against="reference"),
)
NAMES = ("scanner", "phantom", "vial", "quantity", "scan")
VALUES = ["value_ms", "value_at_reference_ms", "deviation_percent"]
OPTIONAL = ["u_deviation_percent", "celsius", "software", "coil", "run_void", "state", "u_reference_ms", "reference_ms"]


def campaign(**told):
    return histories.history(histories.Campaign(**{"scanners": ("N", "S", "E"), "vials": 5, "runs": 20, **told}))


def constant(frame):
    frame[VALUES] = frame.groupby(["scanner", "vial", "quantity"])[VALUES].transform("mean")
    return frame


def later_scan(frame):
    return frame[(frame["scan"] != "T2 train") | (frame["acquired"] > frame["acquired"].median())]


def renamed(frame):
    frame.loc[(frame["acquired"] > frame["acquired"].median()) & (frame["vial"] == "2"), "vial"] = "2 b"
    return frame


def one_reading_in_ten(frame):
    return frame[np.random.default_rng(4).random(len(frame)) < 0.1]


ODD = {
    "no number at all": lambda f: f.assign(**dict.fromkeys(VALUES, np.nan)),
    "every run void": lambda f: f.assign(run_void=True),
    "every reading void": lambda f: f.assign(state="void"),
    "readings that never vary": constant,
    "all at one time": lambda f: f.assign(acquired=f["acquired"].min()),
    "names as categories": lambda f: f.astype(dict.fromkeys(NAMES, "category")),
    "columns missing": lambda f: f.drop(columns=OPTIONAL),
    "a scan that came later": later_scan,
    "a vial renamed": renamed,
    "hardly any reading": one_reading_in_ten,
    "nothing": lambda f: f.iloc[:0],
}


@pytest.mark.parametrize("name", ODD)
def test_odd_frames_are_answered(name):
    frame = ODD[name](campaign())
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        judged = judge(frame, None, LIMITS)
        trend = find(frame, None, LIMITS, today=date(2026, 1, 1))
        agreement = agree(frame)
    assert set(judged) == set(frame["run"])
    json.dumps([trend.as_dict(), agreement.as_dict()], allow_nan=False)
    assert not [finding for finding in trend.findings if finding.kind in ("step", "slope")]


@pytest.mark.parametrize(
    "told",
    [
        {"runs": 1},
        {"runs": 2},
        {"runs": 3, "vials": 1},
        {"vials": 1},
        {"vials": 2},
        {"void": 0.9},
        {"own_percent": 0.0, "common_percent": 0.0},
        {"own_percent": 0.0},
    ],
    ids=str,
)
def test_odd_campaigns_are_answered(told):
    frame = campaign(**told)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert len(judge(frame, None, LIMITS)) == frame["run"].nunique()
        trend = find(frame, None, LIMITS, today=date(2026, 1, 1))
        agreement = agree(frame)
    json.dumps([trend.as_dict(), agreement.as_dict()], allow_nan=False)


@pytest.mark.parametrize("days", [("2020-01-01",), ("2035-01-01",), tuple(f"2024-0{m}-05" for m in range(1, 6))])
def test_odd_restarts_are_borne(days):
    log = histories.log(*({"at": day, "restart_baseline": True} for day in days))
    frame = campaign()
    assert len(judge(frame, log, LIMITS)) == frame["run"].nunique()
    trend = find(frame, log, LIMITS, today=date(2026, 1, 1))
    assert all(finding.state != "open" for finding in trend.findings)


def test_a_campaign_without_any_scatter_still_shows_a_step():
    frame = campaign(own_percent=0.0, common_percent=0.0, shift=histories.step(70.0, 6.0, scanner=0), runs=30)
    (finding,) = [f for f in find(frame, None, LIMITS, today=date(2026, 1, 1)).findings if f.quantity == "T1"]
    assert (finding.scanner, finding.kind, finding.size_percent) == ("N", "step", pytest.approx(6.0, abs=0.2))
