"""Finding: what moved, when, by how much and why, over whole histories."""

import json
from datetime import date, timedelta

import histories
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.site.limits import LimitBlock
from qa.trend import find
from qa.words import Verdict

LIMITS = (LimitBlock(since=date(2020, 1, 1), watch_percent=3.0, act_percent=5.0),)
START, END = date(2024, 1, 1), date(2026, 1, 1)
THREE = ("North bay", "South bay", "East bay")
WHEN = 280.0  # days after the start; a Monday
ONSET = START + timedelta(days=280)


def campaign(**told):
    return histories.history(
        histories.Campaign(**{"scanners": THREE, "vials": 8, "runs": 78, "scans": (("T1 IR", "T1"),), **told})
    )


def found(frame, log=None, limits=LIMITS, today=END):
    return find(frame, log, limits, today=today).findings


def one(frame, **told):
    every = found(frame, **told)
    assert len(every) == 1, [finding.sentence for finding in every]
    return every[0]


def test_steady_scanners_give_no_finding_and_steady_streams():
    trend = find(campaign(), None, LIMITS, today=END)
    assert trend.findings == ()
    assert len(trend.streams) == 24
    assert {row.verdict for row in trend.streams} == {Verdict.STEADY}
    assert all(row.baseline_complete and abs(row.from_baseline_percent) < 1.5 for row in trend.streams)
    assert set(trend.levels["scanner"]) == set(THREE)


def test_a_step_of_one_scanner():
    finding = one(campaign(shift=histories.step(WHEN, 4.0, scanner=1)))
    assert (finding.scanner, finding.cause, finding.kind, finding.state) == ("South bay", "scanner", "step", "open")
    assert finding.verdict is Verdict.WATCH
    assert finding.onset_interval[0] < ONSET <= finding.onset_interval[1]
    assert finding.size_interval[0] < 4.0 < finding.size_interval[1]
    assert finding.vials == tuple(str(number) for number in range(1, 9))
    assert timedelta(0) <= finding.first_raised - ONSET <= timedelta(days=28)
    assert "South bay stepped by +4" in finding.sentence
    assert any("North bay did not move" in reason for reason in finding.cause_reasons)


def test_a_slope_of_one_scanner_is_forecast():
    finding = one(campaign(shift=histories.slope(3.0, WHEN, scanner=2)), today=date(2025, 6, 27))
    assert (finding.scanner, finding.cause, finding.kind) == ("East bay", "scanner", "slope")
    assert finding.rate_interval[0] < 3.0 < finding.rate_interval[1]
    assert finding.onset_interval[0] <= ONSET <= finding.onset_interval[1]
    crossing = ONSET + timedelta(days=5.0 / 3.0 * 365.25)
    assert finding.forecast.earliest <= finding.forecast.crosses <= finding.forecast.latest
    assert abs(finding.forecast.crosses - crossing) < timedelta(days=60)


def test_a_vial_that_ages_on_every_scanner():
    finding = one(campaign(shift=histories.slope(-4.0, WHEN, vial=2)))
    assert (finding.cause, finding.vials, finding.scanner, finding.scanners) == (
        "vial",
        ("3",),
        None,
        tuple(sorted(THREE)),
    )
    assert finding.percent_per_year == pytest.approx(-4.0, abs=0.7)


def test_a_vial_that_moves_on_one_scanner_only_has_no_sure_cause():
    finding = one(campaign(shift=histories.step(WHEN, 4.0, vial=2, scanner=0)))
    assert (finding.cause, finding.vials, finding.scanners) == ("unknown", ("3",), ("North bay",))
    assert finding.size_percent == pytest.approx(4.0, abs=0.6)


def test_a_mended_fault_is_attributed_like_any_other():
    def there_and_back(s, p, v, q, days):
        return 3.0 * ((days >= 300.0) & (days < 380.0))

    every = found(campaign(scanners=THREE[:1], phantoms=("Plate A", "Plate B"), shift=there_and_back))
    assert [(finding.cause, finding.phantoms) for finding in every] == [("scanner", ("Plate A", "Plate B"))] * 2


def test_an_ageing_vial_does_not_make_the_scanner_drift():
    every = found(campaign(scanners=THREE[:1], shift=histories.slope(-6.0, 200.0, vial=5)))
    assert [(finding.cause, finding.vials) for finding in every] == [("vial", ("6",))]


def test_a_phantom_that_changes_everywhere():
    frame = campaign(phantoms=("Plate A", "Plate B"), shift=histories.step(WHEN, 3.0, phantom=1))
    every = found(frame)
    assert {finding.cause for finding in every} == {"phantom"}
    assert {name for finding in every for name in finding.phantoms} == {"Plate B"}
    assert {name for finding in every for name in finding.scanners} == set(THREE)


def test_a_scanner_is_told_from_its_phantom_by_a_second_phantom():
    frame = campaign(scanners=THREE[:1], phantoms=("Plate A", "Plate B"), shift=histories.step(WHEN, 3.0))
    finding = one(frame)
    assert finding.cause == "scanner"
    assert finding.phantoms == ("Plate A", "Plate B")


def test_runs_without_temperature_are_named_as_a_cause():
    frame = campaign(scanners=THREE[:1], shift=histories.step(WHEN, 2.0))
    frame.loc[frame["acquired"].dt.date >= ONSET, "celsius"] = np.nan
    finding = one(frame)
    assert finding.cause == "temperature"
    assert any("no temperature" in reason for reason in finding.cause_reasons)


def test_a_level_that_follows_the_temperature_is_put_down_to_it():
    frame = campaign(scanners=THREE[:1])
    rng = np.random.default_rng(6)
    warmer = {run: 1.2 * rng.random() + 1.0 * (number > 40) for number, run in enumerate(dict.fromkeys(frame["run"]))}
    above = frame["run"].map(warmer)
    frame["celsius"] = 20.4 + above
    frame[["value_ms", "value_at_reference_ms"]] = frame[["value_ms", "value_at_reference_ms"]].mul(
        1.0 + 0.02 * above, axis=0
    )
    finding = next(finding for finding in found(frame) if finding.kind in ("step", "slope"))
    assert finding.cause == "temperature"
    told = next(reason for reason in finding.cause_reasons if "follows the phantom's temperature" in reason)
    per_kelvin = float(told.split("(")[1].split(" %")[0])
    assert per_kelvin == pytest.approx(2.0 / (1.0 + 0.02 * 0.6), abs=0.1)  # the baseline lies at +0.6 K on average


def test_log_entries_near_the_onset_are_told():
    log = histories.log(
        {"at": "2024-10-04T12:00", "scanner": "South bay", "kind": "software", "text": "Software changed."},
        {"at": "2024-10-04T12:00", "scanner": "East bay", "kind": "service", "text": "Elsewhere."},
        {"at": "2024-06-01T12:00", "scanner": "South bay", "kind": "service", "text": "Long before."},
    )
    finding = one(campaign(shift=histories.step(WHEN, 4.0, scanner=1)), log=log)
    assert [entry.text for entry in finding.log_entries] == ["Software changed."]
    assert any("software: Software changed." in reason for reason in finding.cause_reasons)


def test_a_step_beyond_the_action_limit_calls_for_action():
    assert one(campaign(shift=histories.step(WHEN, 7.0, scanner=1))).verdict is Verdict.ACT


def test_a_mended_fault_is_told_as_over():
    def there_and_back(s, p, v, q, days):
        return 4.0 * ((days >= 200.0) & (days < 340.0)) * (s == 1)

    every = found(campaign(shift=there_and_back))
    assert [finding.kind for finding in every] == ["step", "step"]
    assert all(finding.state == "returned" and finding.verdict is Verdict.STEADY for finding in every)
    assert len({finding.finding for finding in every}) == 2
    before = one(campaign(shift=there_and_back), today=START + timedelta(days=320))
    assert before.state == "open"
    assert before.finding == min(every, key=lambda finding: finding.onset).finding


def test_a_restart_accepts_the_step_but_reports_it():
    log = histories.log({"at": "2024-10-05", "scanner": "South bay", "kind": "service", "restart_baseline": True})
    finding = one(campaign(shift=histories.step(WHEN, 4.0, scanner=1)), log=log)
    assert (finding.state, finding.verdict, finding.kind) == ("past", Verdict.STEADY, "step")
    assert finding.size_percent == pytest.approx(4.0, abs=0.5)
    assert "across the restart of the baseline on 2024-10-05" in finding.sentence


def test_without_a_restart_nothing_is_accepted():
    log = histories.log({"at": "2024-10-05", "scanner": "South bay", "kind": "service", "text": "Checked."})
    assert one(campaign(shift=histories.step(WHEN, 4.0, scanner=1)), log=log).state == "open"


def test_the_last_run_far_off_is_a_run_to_repeat():
    frame = campaign(scanners=THREE[:1])
    last = frame["run"].iloc[-1]
    frame.loc[frame["run"] == last, ["value_ms", "value_at_reference_ms"]] *= 1.05
    finding = one(frame)
    assert (finding.kind, finding.verdict, finding.cause) == ("outlier", Verdict.WATCH, "unknown")
    assert "repeat the run" in finding.sentence


@settings(max_examples=10, deadline=None)
@given(place=st.integers(8, 74), percent=st.floats(1.5, 30.0), side=st.sampled_from([-1.0, 1.0]))
def test_one_wild_run_is_never_a_step_or_a_slope(place, percent, side):
    frame = campaign(scanners=THREE[:1])
    run = list(dict.fromkeys(frame["run"]))[place]
    frame.loc[frame["run"] == run, ["value_ms", "value_at_reference_ms"]] *= 1.0 + side * percent / 100.0
    every = found(frame)
    assert {finding.kind for finding in every} <= {"outlier"}
    assert all(finding.state == "past" for finding in every)


def test_scatter_that_grows_is_found():
    frame = campaign(scanners=THREE[:1])
    runs = list(dict.fromkeys(frame["run"]))[-10:]
    rng = np.random.default_rng(5)
    here = frame["run"].isin(runs)
    noise = 1.0 + 0.03 * rng.standard_normal(int(here.sum()))
    for column in ("value_ms", "value_at_reference_ms"):
        frame.loc[here, column] *= noise
    assert "spread" in {finding.kind for finding in found(frame)}


def test_a_standing_bias_beyond_the_reference_limit_is_found():
    limits = (LimitBlock(since=date(2020, 1, 1), watch_percent=6.0, act_percent=9.0, against="reference"),)
    frame = campaign(scanners=THREE[:1])
    frame.loc[frame["vial"] == "4", "deviation_percent"] += 12.0
    finding = one(frame, limits=limits)
    assert (finding.kind, finding.verdict, finding.vials) == ("limit", Verdict.ACT, ("4",))


@settings(max_examples=8, deadline=None)
@given(weeks=st.integers(45, 78))
def test_what_lies_after_today_is_not_looked_at(weeks):
    frame = campaign(shift=histories.step(WHEN, 4.0, scanner=1))
    today = START + timedelta(days=7 * weeks)
    cut = frame[frame["acquired"].dt.date <= today]
    assert found(frame, today=today) == found(cut, today=today)


def test_a_finding_keeps_its_key_as_runs_come():
    frame = campaign(shift=histories.slope(4.0, WHEN, scanner=1))
    keys = {
        finding.finding
        for weeks in (60, 66, 72, 78)
        for finding in found(frame, today=START + timedelta(days=7 * weeks))
        if finding.state == "open"
    }
    assert len(keys) == 1


@pytest.mark.parametrize("factor", [0.01, 25.0])
def test_findings_do_not_care_for_the_unit_of_time(factor):
    frame = campaign(shift=histories.step(WHEN, 4.0, scanner=1))
    scaled = frame.copy()
    for column in ("value_ms", "u_ms", "value_at_reference_ms", "u_at_reference_ms", "reference_ms", "u_reference_ms"):
        scaled[column] *= factor
    mine, other = one(frame), one(scaled)
    assert other.size_percent == pytest.approx(mine.size_percent)
    assert (other.onset, other.kind, other.finding) == (mine.onset, mine.kind, mine.finding)


@pytest.mark.parametrize(
    "told", [{"runs": 1}, {"runs": 5}, {"vials": 1}, {"vials": 2}, {"missing": 0.4}, {"void": 0.5}]
)
def test_thin_histories_give_streams_and_no_finding(told):
    trend = find(campaign(scanners=THREE[:1], **told), None, LIMITS, today=END)
    assert trend.findings == ()
    assert trend.streams
    json.dumps(trend.as_dict(), allow_nan=False)


def test_an_empty_history_gives_an_empty_answer():
    trend = find(campaign(runs=1).iloc[:0], None, LIMITS, today=END)
    assert (trend.findings, trend.streams, len(trend.levels)) == ((), (), 0)


def test_without_limits_findings_are_still_found_and_graded_watch():
    assert one(campaign(shift=histories.step(WHEN, 9.0, scanner=1)), limits=()).verdict is Verdict.WATCH


def test_the_document_is_plain():
    finding = one(campaign(shift=histories.slope(3.0, WHEN, scanner=1)))
    document = json.loads(json.dumps(finding.as_dict(), allow_nan=False))
    assert date.fromisoformat(document["onset"]) == finding.onset
    assert document["verdict"] in {"watch", "act"}
    assert set(document["forecast"]) == {"crosses", "earliest", "latest"}
