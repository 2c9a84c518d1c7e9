"""What a book promises of measurements, whichever database it lies in: each database puts a subclass through it."""

from dataclasses import replace
from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from book_factory import START, fill, measurement, reading, session
from store_base import DAY, HOW, Fixtures, block, file

from qa.errors import StoreError
from qa.intake.series import Held
from qa.words import Consequence, Quantity, Remark, State, Verdict


class MeasuringContract(Fixtures):
    # --- measurements ---

    def test_numbers_that_are_none_come_back_as_absent(self, book):
        bad = replace(reading("1", "T1 IR", Quantity.T1, "ir", 900.0, 900.0), value_ms=float("nan"), u_ms=float("inf"))
        one = session("North bay", "Plate A", START)
        book.record(replace(one, field_t=float("nan")), replace(measurement("N", 0), readings=(bad,)), **HOW)
        back = book.measurement(one.run).readings[0]
        assert (back.value_ms, back.u_ms) == (None, None)
        assert np.isnan(book.readings().loc[0, "value_ms"])
        assert book.audit() == []

    def test_text_that_a_database_refuses_is_escaped(self, book):
        one = session("North bay", "Plate A", START)
        odd = "null \0 and lone \udce4 surrogate"
        book.record(replace(one, facts={"Odd": odd}), replace(measurement("N", 0), software=odd, coil=odd), **HOW)
        assert book.measurement(one.run).software == r"null \x00 and lone \udce4 surrogate"
        assert book.audit() == []

    def test_a_run_measured_again_gets_a_generation_and_the_first_stays(self, book, clock):
        one, first = session("North bay", "Plate A", START), measurement("North bay", 0, seed=1)
        second = measurement("North bay", 0, seed=2)
        assert book.record(one, first, **HOW) == 1
        clock.time += DAY
        assert book.record(one, second, method_fingerprint="inversion-recovery 2", reason="remeasured") == 2
        assert book.measurement(one.run, 1) == first
        assert book.measurement(one.run) == second
        assert list(book.runs(generation="all")["generation"]) == [1, 2]
        assert list(book.runs()["generation"]) == [2]
        assert set(book.readings()["generation"]) == {2}
        assert set(book.readings(generation=1)["generation"]) == {1}
        assert len(book.readings(generation="all")) == 2 * len(first.readings)

    def test_the_book_as_of_a_day_knows_nothing_of_later_measuring(self, book, clock):
        one = session("North bay", "Plate A", START)
        book.record(one, measurement("North bay", 0, seed=1), **HOW)
        clock.time += 10 * DAY
        book.record(one, measurement("North bay", 0, seed=2), **HOW)
        assert set(book.readings(as_of=START + DAY)["generation"]) == {1}
        assert set(book.readings(as_of=(START + 10 * DAY).date())["generation"]) == {2}
        assert len(book.readings(as_of=START - DAY)) == 0
        assert list(book.runs(as_of=START + DAY)["generation"]) == [1]

    def test_with_only_new_files_a_second_ingest_changes_nothing(self, book):
        one = session("North bay", "Plate A", START, files=3)
        assert book.record(one, measurement("N", 0), only_new_files=True, **HOW) == 1
        before = book.anchor()
        assert book.record(one, measurement("N", 0, seed=9), only_new_files=True, **HOW) == 1
        assert book.anchor() == before
        more = replace(one, files=(*one.files, file(77)))
        assert book.record(more, measurement("N", 0), only_new_files=True, **HOW) == 2
        assert list(book.runs(generation="all")["files"]) == [3, 4]

    def test_files_are_known_by_hash_and_listed_by_run(self, book):
        files = (file(2), file(1), file(1))
        one = replace(session("North bay", "Plate A", START), files=files)
        book.record(one, measurement("N", 0), duplicates=[file(5)], **HOW)
        known = book.known_files()
        assert file(1).sha256 in known
        assert file(5).sha256 in known
        assert file(3).sha256 not in known
        assert None not in known
        assert book.run_files(one.run) == (file(1), file(2))
        assert book.run_files("nobody") == ()
        assert book.has_run(one.run)
        assert not book.has_run("nobody")
        assert list(book.runs()["files"]) == [2]

    def test_a_file_larger_than_32_bits_can_tell_is_recorded(self, book):
        one = replace(session("North bay", "Plate A", START), files=(file(1, size=2**40),))
        book.record(one, measurement("N", 0), **HOW)
        assert book.run_files(one.run)[0].size == 2**40

    def test_what_cannot_be_recorded_leaves_nothing_behind(self, book):
        one, before = session("North bay", "Plate A", START), book.anchor()
        twice = measurement("N", 0).readings[0]
        with pytest.raises(StoreError, match="refused a row"):
            book.record(one, replace(measurement("N", 0), readings=(twice, twice)), **HOW)
        with pytest.raises(StoreError, match="no time zone"):
            book.record(replace(one, acquired=datetime(2025, 1, 6)), measurement("N", 0), **HOW)
        assert not book.has_run(one.run)
        assert book.anchor() == before
        assert book.audit() == []

    # --- verdicts ---

    def test_a_verdict_is_kept_with_the_limits_it_was_judged_by(self, book):
        one = session("North bay", "Plate A", START)
        book.record(one, measurement("N", 0), **HOW)
        assert book.runs().loc[0, "verdict"] in (None,) or np.isnan(book.runs().loc[0, "verdict"])
        noted = book.note_limits([block()])
        assert book.set_verdict(one.run, 1, Verdict.WATCH, ["vial 3: T1 is 3.2 % off"], noted.digest)
        row = book.runs().loc[0]
        assert (row["verdict"], row["reasons"]) == ("watch", ["vial 3: T1 is 3.2 % off"])
        assert list(book.limits(row["limits_digest"])["block"]) == [
            {"since": "2025-01-01", "watch_percent": 3.0, "act_percent": 5.0, "against": "baseline"}
        ]
        before = book.anchor()
        assert not book.set_verdict(one.run, 1, "watch", ["vial 3: T1 is 3.2 % off"], noted.digest)
        assert book.anchor() == before
        assert book.audit() == []

    def test_a_verdict_needs_its_measurement(self, book):
        with pytest.raises(StoreError, match="no generation 4"):
            book.set_verdict("nobody", 4, Verdict.ACT)

    # --- frames ---

    def test_frames_have_the_same_columns_and_types_with_rows_and_without(self, book):
        empty = {
            name: getattr(book, name)() for name in ("readings", "runs", "log_entries", "held", "limits", "rulings")
        }
        fill(book, weeks=2)
        book.add_log_entry(START, "North bay", None, "service", "new gradient amplifier")
        book.hold([Held("a.txt", "not-dicom", "no DICOM file")])
        book.note_limits([block()])
        book.save_findings([{"finding": "f1", "verdict": "watch"}])
        book.rule("f1", "M. Example", "watch on", "small")
        for name, none in empty.items():
            some = getattr(book, name)()
            assert len(none) == 0
            assert len(some) > 0
            assert list(none.columns) == list(some.columns), name
            for column in some.columns:
                kinds = (none[column].dtype.kind, some[column].dtype.kind)
                assert kinds[0] == kinds[1] or "O" in kinds, (name, column, kinds)
        for column in ("acquired", "measured_at"):
            assert str(book.runs()[column].dtype) == "datetime64[ns, UTC]"
        assert str(book.readings()["acquired"].dtype) == "datetime64[ns, UTC]"

    def test_readings_come_in_order_and_narrowed_down(self, book):
        fill(book, weeks=3, vials=4)
        everything = book.readings()
        assert everything["acquired"].is_monotonic_increasing
        assert list(everything["vial"][:8]) == ["1", "2", "3", "4"] * 2
        assert len(everything) == 3 * 2 * 8
        assert set(book.readings(scanner="South bay")["scanner"]) == {"South bay"}
        assert len(book.readings(phantom="nobody")) == 0
        assert len(book.readings(since=START + timedelta(weeks=1))) == 2 * 2 * 8
        assert len(book.readings(since=(START + timedelta(weeks=2)).date())) == 2 * 8
        run = everything["run"].iloc[-1]
        assert set(book.readings(run=run)["run"]) == {run}
        assert book.runs(run=run).loc[0, "run"] == run

    def test_a_reading_in_the_frame_is_the_one_that_was_measured(self, book):
        one, measured = session("North bay", "Plate A", START), measurement("N", 0)
        notes = replace(measured.readings[1], notes=("first", "second"), state=State.MARKED)
        book.record(one, replace(measured, readings=(measured.readings[0], notes)), **HOW)
        row = book.readings().loc[1]
        for name in ("vial", "scan", "method", "method_version", "voxels", "excluded_voxels", "value_ms", "u_ms"):
            assert row[name] == getattr(notes, name)
        for name in ("value_at_reference_ms", "u_at_reference_ms", "deviation_percent", "u_reference_ms"):
            assert row[name] == getattr(notes, name)
        assert (row["notes"], row["state"], row["quantity"]) == ("first; second", "marked", "T1")
        assert (row["u_noise_ms"], row["u_region_ms"]) == (notes.budget.noise_ms, notes.budget.region_ms)
        assert (row["celsius"], row["software"], row["coil"]) == (20.5, "V1", "HEAD 16")

    def test_times_come_back_as_the_same_instant(self, book):
        local = datetime(2025, 7, 6, 9, 30, 1, 250_001, tzinfo=ZoneInfo("Europe/Lisbon"))
        book.record(session("North bay", "Plate A", local), measurement("N", 0), **HOW)
        assert book.readings().loc[0, "acquired"].isoformat() == "2025-07-06T08:30:01.250001+00:00"
        assert len(book.readings(since=local)) > 0
        assert len(book.readings(since=local + timedelta(microseconds=1))) == 0

    def test_only_a_void_remark_on_the_whole_run_makes_it_void(self, book):
        for week, (subject, consequence) in enumerate([("T1 IR", "void"), ("", "watch"), ("", "void")]):
            remark = Remark("odd", "something", Consequence(consequence), subject)
            when = START + timedelta(weeks=week)
            book.record(session("N", "P", when), replace(measurement("N", week), remarks=(remark,)), **HOW)
        assert list(book.runs()["run_void"]) == [False, False, True]
        assert book.runs().loc[2, "remarks"] == [
            {"code": "odd", "text": "something", "consequence": "void", "subject": ""}
        ]
        assert book.readings().groupby("run", sort=False)["run_void"].all().tolist() == [False, False, True]

    def test_a_run_that_could_not_be_placed_has_no_placement(self, book):
        one = session("North bay", "Plate A", START)
        lost = replace(measurement("N", 0), placement=None, placement_centre_mm=None, readings=())
        book.record(one, lost, **HOW)
        row = book.runs().loc[0]
        assert np.isnan(row["rotation_deg"])
        assert np.isnan(row["centre_x_mm"])
        assert len(book.readings()) == 0

    def test_asking_for_a_run_that_is_not_there_says_so(self, book):
        one = session("North bay", "Plate A", START)
        book.record(one, measurement("N", 0), **HOW)
        with pytest.raises(StoreError, match="no run nobody"):
            book.measurement("nobody")
        with pytest.raises(StoreError, match="it has 1 to 1"):
            book.evidence(one.run, 7)
