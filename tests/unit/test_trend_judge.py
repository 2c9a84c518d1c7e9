"""Judging: what a physicist may rely on, run by run."""

import dataclasses
from datetime import date
from zoneinfo import ZoneInfo

import histories
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.site.limits import LimitBlock
from qa.trend import judge
from qa.words import Verdict

LIMITS = (LimitBlock(since=date(2020, 1, 1), watch_percent=3.0, act_percent=5.0),)
SHORT = {"vials": 8, "runs": 40}


def campaign(**told):
    return histories.history(histories.Campaign(**{**SHORT, **told}))


def verdicts(judged):
    return [one.verdict for one in judged.values()]


def raised(frame, run, percent, vial=None):
    """The same history with one run's values moved by so many percent."""
    moved = frame.copy()
    here = (moved["run"] == run) & (True if vial is None else moved["vial"] == vial)
    for column in ("value_ms", "value_at_reference_ms"):
        moved.loc[here, column] *= 1.0 + percent / 100.0
    moved.loc[here, "deviation_percent"] += percent
    return moved


def at(frame, number):
    return list(dict.fromkeys(frame["run"]))[number]


def test_a_steady_scanner_stays_steady_and_says_when_its_baseline_is_learnt():
    judged = list(judge(campaign(seed=3), None, LIMITS).values())
    assert {one.verdict for one in judged} == {Verdict.STEADY}
    assert judged[0].reasons == ("Baseline being learnt (1 of 8 runs); drift cannot be judged yet.",)
    assert judged[7].reasons == ("Baseline being learnt (8 of 8 runs); judged from the next run on.",)
    assert all(one.reasons == () for one in judged[8:])


def numbers_of(judgement):
    """All numbers of the stream rows; NaN for None."""
    rows = [dataclasses.astuple(row) for row in judgement.streams]
    return [np.nan if item is None else item for row in rows for item in row if not isinstance(item, str)]


@settings(max_examples=12, deadline=None)
@given(cut=st.integers(1, 39), seed=st.integers(0, 99))
def test_what_comes_later_never_changes_a_verdict(cut, seed):
    shift = histories.step(150.0, 4.0)
    frame = campaign(shift=shift, seed=seed, missing=0.05)
    names = list(dict.fromkeys(frame["run"]))[:cut]
    whole = judge(frame, None, LIMITS)
    early = judge(frame[frame["run"].isin(names)], None, LIMITS)
    assert {run: (one.verdict, one.reasons) for run, one in early.items()} == {
        run: (whole[run].verdict, whole[run].reasons) for run in early
    }
    for run, one in early.items():
        assert numbers_of(one) == pytest.approx(numbers_of(whole[run]), rel=1e-9, nan_ok=True)


@settings(max_examples=12, deadline=None)
@given(factor=st.floats(0.1, 10.0), seed=st.integers(0, 99))
def test_verdicts_do_not_care_for_the_unit_of_time(factor, seed):
    frame = campaign(shift=histories.slope(4.0, 100.0), seed=seed)
    scaled = frame.copy()
    for column in ("value_ms", "u_ms", "value_at_reference_ms", "u_at_reference_ms", "reference_ms", "u_reference_ms"):
        scaled[column] *= factor
    assert verdicts(judge(scaled, None, LIMITS)) == verdicts(judge(frame, None, LIMITS))


@settings(max_examples=15, deadline=None)
@given(place=st.integers(9, 39), percent=st.floats(2.0, 40.0), side=st.sampled_from([-1.0, 1.0]))
def test_one_wild_run_is_no_drift(place, percent, side):
    frame = campaign(seed=3)
    run = at(frame, place)
    judged = judge(raised(frame, run, side * percent), None, LIMITS)
    after = [one for name, one in judged.items() if name != run]
    assert all(one.verdict is Verdict.STEADY for one in after)
    assert not any(
        "has moved" in reason or "moves apart" in reason for one in judged.values() for reason in one.reasons
    )


@pytest.mark.parametrize("place", [0, 3, 7])
@pytest.mark.parametrize("percent", [-30.0, 3.0])
def test_one_wild_run_hardly_moves_the_baseline(place, percent):
    frame = campaign()
    plain = judge(frame, None, LIMITS)
    moved = judge(raised(frame, at(frame, place), percent), None, LIMITS)
    last = at(frame, 39)
    pairs = zip(moved[last].streams, plain[last].streams, strict=True)
    apart = [one.from_baseline_percent - other.from_baseline_percent for one, other in pairs]
    assert np.mean(np.abs(apart)) < 0.2  # single readings scatter by 0.6
    assert Verdict.ACT not in verdicts(moved)[8:]


def test_a_step_calls_for_action_and_says_by_how_much():
    judged = judge(campaign(shift=histories.step(139.0, 7.0)), None, LIMITS)
    first = list(judged.values())[20]
    assert first.verdict is Verdict.ACT
    assert first.reasons[0].startswith(("T1 of the whole scanner is +7", "T1 of the whole scanner is +6"))
    assert "beyond the action limit of 5 %" in first.reasons[0]
    assert {one.verdict for one in list(judged.values())[21:]} == {Verdict.ACT}


def test_a_small_lasting_step_is_watched_though_within_limits():
    judged = list(judge(campaign(shift=histories.step(139.0, 1.0)), None, LIMITS).values())
    assert {one.verdict for one in judged[30:]} == {Verdict.WATCH}
    told = next(reason for reason in judged[35].reasons if "of the whole scanner has moved" in reason)
    began = date.fromisoformat(told.split("since about ")[1][:10])
    assert abs((began - date(2024, 5, 20)).days) <= 14


def test_one_vial_alone_is_named():
    frame = campaign(shift=histories.step(139.0, 4.0, vial=2, scan=0))
    reasons = list(judge(frame, None, LIMITS).values())[30].reasons
    assert all("Vial 3 T1" in reason for reason in reasons)
    assert not any("whole scanner" in reason for reason in reasons)


def test_a_very_uncertain_reading_does_not_alone_call_for_action():
    frame = campaign()
    run = at(frame, 20)
    far = raised(frame, run, 12.0, vial="3")
    assert judge(far, None, LIMITS)[run].verdict is Verdict.ACT
    for column in ("u_ms", "u_at_reference_ms", "u_deviation_percent"):
        far.loc[(far["run"] == run) & (far["vial"] == "3"), column] *= 10.0
    told = judge(far, None, LIMITS)[run]
    assert told.verdict is not Verdict.ACT
    assert any("Too uncertain to be judged alone" in reason and "vial 3" in reason for reason in told.reasons)


def test_void_runs_are_void_and_count_for_nothing():
    frame = campaign()
    run = at(frame, 3)
    wild = raised(frame, run, 50.0)
    wild.loc[wild["run"] == run, "run_void"] = True
    judged = judge(wild, None, LIMITS)
    assert judged[run].verdict is Verdict.VOID
    without = judge(frame[frame["run"] != run], None, LIMITS)
    for name, one in without.items():
        assert (one.verdict, one.reasons) == (judged[name].verdict, judged[name].reasons)
        assert numbers_of(one) == pytest.approx(numbers_of(judged[name]), rel=1e-9, nan_ok=True)


def test_a_void_run_says_why():
    frame = campaign(runs=4)
    runs = histories.runs(frame)
    remark = {"code": "plate", "text": "The plate was not found.", "consequence": "void", "subject": ""}
    runs.at[2, "remarks"] = [remark]
    judged = judge(frame, None, LIMITS, runs=runs)
    assert judged[runs["run"][2]].verdict is Verdict.VOID
    assert judged[runs["run"][2]].reasons == ("The plate was not found.",)


def test_a_run_without_any_reading_is_void():
    frame = campaign(runs=5)
    runs = histories.runs(frame)
    gone = frame[frame["run"] != runs["run"][4]]
    told = judge(gone, None, LIMITS, runs=runs)[runs["run"][4]]
    assert told.verdict is Verdict.VOID
    assert told.reasons == ("This run gave no reading that could be judged.",)


def test_a_remark_to_watch_is_a_reason_to_watch():
    frame = campaign(runs=5)
    runs = histories.runs(frame)
    runs.at[4, "remarks"] = [{"code": "tr", "text": "TR is 4000 ms.", "consequence": "watch", "subject": "T1 IR"}]
    told = judge(frame, None, LIMITS, runs=runs)[runs["run"][4]]
    assert told.verdict is Verdict.WATCH
    assert told.reasons[0] == "TR is 4000 ms."


def test_only_the_runs_asked_for_are_answered():
    frame = campaign()
    wanted = [at(frame, 5), at(frame, 30)]
    some = judge(frame, None, LIMITS, runs=wanted)
    assert list(some) == wanted
    assert some == {run: judge(frame, None, LIMITS)[run] for run in wanted}


def test_a_baseline_restarts_only_where_the_log_asks_for_it():
    frame = campaign(shift=histories.step(139.0, 6.0))
    service = {"at": "2024-05-19", "scanner": "North bay", "kind": "service", "text": "Gradient board replaced."}
    kept = judge(frame, histories.log(service), LIMITS)
    restarted = judge(frame, histories.log({**service, "restart_baseline": True}), LIMITS)
    assert list(kept.values())[39].verdict is Verdict.ACT
    assert list(restarted.values())[39].verdict is Verdict.STEADY
    assert list(restarted.values())[20].reasons[0].startswith("Baseline being learnt (1 of 8 runs)")
    assert list(restarted.values())[20].streams[0].from_baseline_percent is None


def test_without_limits_charts_still_watch_and_nothing_calls_for_action():
    judged = judge(campaign(shift=histories.step(139.0, 6.0)), None, ())
    assert {Verdict.STEADY, Verdict.WATCH} == set(verdicts(judged))
    last = list(judged.values())[-1]
    assert last.verdict is Verdict.WATCH
    assert last.streams[0].act_percent is None


def test_limits_hold_from_the_day_they_say_in_the_site_time_zone():
    frame = campaign(shift=histories.step(139.0, 4.0))
    frame["acquired"] = frame["acquired"] + np.timedelta64(16, "h")  # 23:30 UTC: the next day in Oslo
    tight = LimitBlock(since=date(2024, 8, 6), watch_percent=1.0, act_percent=2.0)
    run = next(r for r, when in zip(frame["run"], frame["acquired"], strict=True) if when.date() == date(2024, 8, 5))
    in_utc = judge(frame, None, (*LIMITS, tight))[run]
    in_oslo = judge(frame, None, (*LIMITS, tight), timezone=ZoneInfo("Europe/Oslo"))[run]
    assert (in_utc.verdict, in_oslo.verdict) == (Verdict.WATCH, Verdict.ACT)
    assert in_utc.limits_digest != in_oslo.limits_digest


def test_limits_from_the_reference_are_judged_from_the_first_run():
    limits = (LimitBlock(since=date(2020, 1, 1), watch_percent=8.0, act_percent=12.0, against="reference"),)
    frame = campaign(runs=3)
    first = at(frame, 0)
    told = judge(raised(frame, first, 20.0, vial="2"), None, limits)[first]
    assert told.verdict is Verdict.ACT
    assert "from its reference, beyond the action limit of 12 %" in told.reasons[0]


def test_readings_that_are_suddenly_missing_are_reported():
    frame = campaign()
    run = at(frame, 20)
    some = frame[~((frame["run"] == run) & (frame["vial"] == "2"))]
    told = judge(some, None, LIMITS)[run]
    assert told.verdict is Verdict.STEADY
    assert told.reasons == ("No usable reading this time: T1: vial 2; T2: vial 2.",)
    half = frame[~((frame["run"] == run) & (frame["quantity"] == "T2"))]
    told = judge(half, None, LIMITS)[run]
    assert told.verdict is Verdict.WATCH
    assert told.reasons == ("No usable reading this time: T2: every vial.",)


@pytest.mark.parametrize("vials", [1, 2, 3])
def test_few_vials_are_judged_too(vials):
    judged = judge(campaign(vials=vials, shift=histories.step(139.0, 7.0)), None, LIMITS)
    assert set(verdicts(judged)[8:20]) == {Verdict.STEADY}
    assert list(judged.values())[25].verdict is Verdict.ACT


def test_a_single_run_forms_its_baseline():
    judged = judge(campaign(runs=1), None, LIMITS)
    (only,) = judged.values()
    assert only.verdict is Verdict.STEADY
    assert only.reasons == ("Baseline being learnt (1 of 8 runs); drift cannot be judged yet.",)


def test_unknown_uncertainties_do_not_stop_the_judging():
    frame = campaign()
    for column in ("u_ms", "u_at_reference_ms", "u_deviation_percent", "u_reference_ms", "celsius"):
        frame[column] = np.nan
    found = verdicts(judge(frame, None, LIMITS))
    assert found.count(Verdict.STEADY) >= 39
    assert Verdict.ACT not in found


def test_an_empty_history_gives_no_judgement():
    assert judge(campaign(runs=1).iloc[:0], None, LIMITS) == {}


def test_a_second_phantom_has_a_baseline_of_its_own():
    frame = campaign(phantoms=("Plate A", "Plate B"), shift=histories.step(139.0, 7.0, phantom=1))
    judged = judge(frame, None, LIMITS)
    assert {one.verdict for one in judged.values() if one.phantom == "Plate A"} == {Verdict.STEADY}
    assert [one.verdict for one in judged.values() if one.phantom == "Plate B"][-1] is Verdict.ACT
