"""Log entries that the runs themselves write."""

import histories
import pandas as pd
import pytest

from qa.trend import log_entries_from_runs


def runs(**told):
    return histories.runs(histories.history(histories.Campaign(**{"vials": 2, "runs": 6, **told})))


def test_a_software_change_is_read_from_the_first_run_that_has_it():
    frame = runs(software=lambda scanner, day: "A1" if day < 20 else "B2")
    (entry,) = log_entries_from_runs(frame)
    assert (entry.kind, entry.scanner, entry.run) == ("software", "North bay", frame["run"][3])
    assert entry.at == frame["acquired"][3].to_pydatetime()
    assert entry.text == "Software changed from A1 to B2 (read from the images)."


def test_a_coil_change_there_and_back_is_two_entries():
    frame = runs()
    frame["coil"] = ["head", "head", "knee", "knee", "head", "head"]
    assert [entry.kind for entry in log_entries_from_runs(frame)] == ["coil", "coil"]


@pytest.mark.parametrize("silent", ["", None, float("nan"), "  "])
def test_runs_that_do_not_say_are_passed_over(silent):
    frame = runs()
    frame["software"] = pd.Series(["A1", silent, "A1", silent, silent, "A1"], dtype=object)
    assert log_entries_from_runs(frame) == []


def test_scanners_do_not_mix_and_rows_need_no_order():
    frame = runs(scanners=("North bay", "South bay"), software=lambda scanner, day: f"S{scanner}")
    assert log_entries_from_runs(frame.iloc[::-1]) == []


def test_no_runs_no_entries():
    assert log_entries_from_runs(runs().iloc[:0]) == []
