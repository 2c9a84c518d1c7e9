"""Tidy frames become matrices: order, usable numbers, restarts, and odd frames."""

import histories
import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal

from qa.trend.streams import blocks, restarts

SMALL = histories.Campaign(vials=3, runs=6)


def one(frame):
    made = blocks(frame)
    assert len(made) == 1
    return made[0]


@settings(max_examples=10, deadline=None)
@given(st.randoms(use_true_random=False))
def test_the_order_of_rows_does_not_matter(random):
    frame = histories.history(SMALL)
    order = list(range(len(frame)))
    random.shuffle(order)
    shuffled, plain = one(frame.iloc[order]), one(frame)
    assert shuffled.runs == plain.runs
    assert shuffled.streams == plain.streams
    assert_array_equal(shuffled.value, plain.value)


def test_vials_stand_in_the_order_people_count_them():
    block = one(histories.history(histories.Campaign(vials=11, runs=2, scans=(("T1 IR", "T1"),))))
    assert [stream.vial for stream in block.streams] == [str(number) for number in range(1, 12)]


def test_only_states_with_a_number_and_runs_that_are_not_void_count():
    frame = histories.history(SMALL)
    frame.loc[0, "state"] = "not determined"
    frame.loc[1, "state"] = "marked"
    frame.loc[frame["run"] == frame["run"].iloc[-1], "run_void"] = True
    block = one(frame)
    assert np.isfinite(block.value).sum() == len(frame) - 1 - 6
    assert block.void.tolist() == [False] * 5 + [True]


@pytest.mark.parametrize("value", [0.0, -5.0, np.nan, np.inf])
def test_impossible_values_are_no_numbers(value):
    frame = histories.history(SMALL)
    frame.loc[0, ["value_ms", "value_at_reference_ms"]] = value
    assert np.isfinite(one(frame).value).sum() == len(frame) - 1


def test_without_correction_the_value_stands_as_measured():
    frame = histories.history(SMALL)
    frame["value_at_reference_ms"] = np.nan
    frame["value_ms"] = 123.0
    assert (one(frame).value == 123.0).all()


def test_an_unstated_uncertainty_is_taken_from_the_others():
    frame = histories.history(SMALL)
    frame.loc[3, ["u_ms", "u_at_reference_ms"]] = np.nan
    u = one(frame).u
    assert np.isfinite(u).all()
    frame["u_ms"] = frame["u_at_reference_ms"] = np.nan
    assert (one(frame).u == 1.0).all()


def test_runs_at_the_same_time_stay_apart_and_in_a_fixed_order():
    frame = histories.history(SMALL)
    frame["acquired"] = frame["acquired"].min()
    block = one(frame)
    assert len(block.runs) == 6
    assert block.runs == tuple(sorted(block.runs))


def test_a_reading_given_twice_counts_once():
    frame = histories.history(SMALL)
    again = pd.concat([frame, frame.iloc[[0]].assign(value_at_reference_ms=777.0)], ignore_index=True)
    block = one(again)
    assert (block.value == 777.0).sum() == 1


def test_times_without_a_zone_are_utc_and_text_is_read():
    frame = histories.history(SMALL)
    texts = frame.assign(acquired=[when.isoformat() for when in frame["acquired"]])
    naive = frame.assign(acquired=frame["acquired"].dt.tz_convert(None))
    for other in (texts, naive):
        assert_array_equal(one(other).acquired, one(frame).acquired)


def test_an_empty_frame_gives_nothing():
    assert blocks(histories.history(SMALL).iloc[:0]) == ()


def test_restarts_speak_of_their_scanner_and_phantom_or_of_all():
    log = histories.log(
        {"at": "2024-02-01", "restart_baseline": True},
        {"at": "2024-03-01", "restart_baseline": True, "scanner": "North bay"},
        {"at": "2024-04-01", "restart_baseline": True, "scanner": "South bay"},
        {"at": "2024-05-01", "restart_baseline": True, "phantom": "Plate B"},
        {"at": "2024-06-01", "scanner": "North bay"},
    )
    found = restarts(log, "North bay", "Plate A").astype("datetime64[M]").astype(str).tolist()
    assert found == ["2024-02", "2024-03"]
    assert restarts(None, "North bay", "Plate A").size == 0
