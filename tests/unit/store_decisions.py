"""What a book promises of held files, limits, the log, findings and the ledger, whichever database it lies in."""

from dataclasses import replace
from datetime import UTC, datetime, timedelta

import pytest
from book_factory import START, fill, measurement, session
from store_base import DAY, HOW, Fixtures, block

from qa.errors import StoreError, UsageError
from qa.intake.series import Held
from qa.store import limits_digest
from qa.words import Quantity, Verdict


class DecidingContract(Fixtures):
    # --- held files ---

    def test_a_held_file_is_remembered_once_and_may_be_let_go(self, book, clock):
        held = [Held("a.dcm", "truncated", "ends early", "a" * 64), Held("b.txt", "not-dicom", "no DICOM file")]
        assert book.hold(held) == 2
        clock.time += DAY
        assert book.hold(held) == 0
        frame = book.held()
        assert list(frame["path"]) == ["a.dcm", "b.txt"]
        assert (frame["last_seen"] - frame["first_seen"] == DAY).all()
        assert book.hold([replace(held[0], code="no-timing")]) == 1
        assert book.release(["a" * 64, "never seen"]) == 1
        assert list(book.held()["path"]) == ["b.txt"]
        assert len(book.held(resolved=True)) == 2
        assert book.release(["b.txt"]) == 1
        assert book.release(["b.txt"]) == 0
        assert book.hold(held) == 2  # held again
        assert len(book.held()) == 2
        assert book.audit() == []

    def test_many_held_files_at_once(self, book):
        many = [Held(f"{n}.dcm", "wrong-modality", "CT", f"{n:064x}") for n in range(1300)]
        assert book.hold(many) == 1300
        assert book.hold(many) == 0
        assert book.release(one.path for one in many) == 1300
        assert book.audit() == []

    # --- limits ---

    def test_limits_seen_for_the_first_time_alter_nothing(self, book):
        noted = book.note_limits([block(), block(quantity=Quantity.T1, vials=("1", "2"))])
        assert [change.change for change in noted.changes] == ["noted", "noted"]
        assert not any(change.backwards for change in noted.changes)
        assert noted.digest == limits_digest([block(), block(quantity=Quantity.T1, vials=("1", "2"))])
        before = book.anchor()
        assert book.note_limits([block(), block(quantity=Quantity.T1, vials=("1", "2"))]).changes == ()
        assert book.anchor() == before

    def test_limits_altered_for_a_time_already_judged_are_noticed(self, book):
        book.note_limits([block()])
        fill(book, weeks=2)
        changes = book.note_limits([block(act=8.0)]).changes
        assert [(c.change, c.judged) for c in changes] == [("noted", 4), ("withdrawn", 4)]
        problems = book.audit()
        assert [problem.code for problem in problems] == ["limits-altered-backwards"]
        assert not problems[0].grave
        assert "8.0" in problems[0].text
        back = book.note_limits([block()]).changes
        assert [(c.change, c.backwards) for c in back] == [("withdrawn", True), ("reinstated", True)]
        assert len(book.limits()) == 2

    def test_a_later_block_is_no_alteration(self, book):
        book.note_limits([block()])
        fill(book, weeks=2)
        later = block(since=START.date() + timedelta(weeks=10), act=4.0)
        assert [c.backwards for c in book.note_limits([block(), later]).changes] == [False]
        assert book.audit() == []

    # --- the log ---

    def test_what_dicom_tells_is_logged_once_and_what_people_tell_each_time(self, book):
        told = (START, "North bay", None, "software", "V1 to V2")
        first = book.add_log_entry(*told, source="dicom")
        assert book.add_log_entry(*told, source="dicom") == first
        assert book.add_log_entry(*told, who="M. Example") != first
        assert book.add_log_entry(START, "South bay", None, "software", "V1 to V2", source="dicom") != first
        assert len(book.log_entries()) == 3
        assert book.audit() == []

    def test_log_entries_come_back_by_time_with_those_about_no_one_in_particular(self, book):
        book.add_log_entry(START + DAY, None, "Plate A", "refill", "all vials", restart_baseline=True, who="M. Example")
        book.add_log_entry(START, "North bay", None, "service", "coil repaired")
        log = book.log_entries()
        assert list(log["kind"]) == ["service", "refill"]
        assert list(log["restart_baseline"]) == [False, True]
        assert str(log["at"].dtype) == "datetime64[ns, UTC]"
        assert len(book.log_entries(scanner="South bay")) == 1
        assert len(book.log_entries(scanner="North bay", phantom="Plate B")) == 1

    def test_a_log_entry_must_say_something(self, book):
        for kind, words, celsius in [("gossip", "x", None), ("note", "  ", None), ("temperature", "x", None)]:
            with pytest.raises(UsageError):
                book.add_log_entry(START, None, None, kind, words, celsius=celsius)
        assert len(book.log_entries()) == 0

    def test_the_logged_temperature_nearest_to_the_run_counts(self, book):
        for hours, celsius in [(-13, 15.0), (-3, 20.1), (2, 20.6), (2, 20.7)]:
            at = START + timedelta(hours=hours)
            book.add_log_entry(at, "North bay", None, "temperature", "thermometer", celsius=celsius)
        assert book.temperature_logged("North bay", START) == 20.7
        assert book.temperature_logged("North bay", START - timedelta(hours=2)) == 20.1
        assert book.temperature_logged("South bay", START) is None
        assert book.temperature_logged("North bay", START + 3 * DAY) is None

    # --- findings and rulings ---

    def test_a_finding_grows_and_is_not_raised_anew(self, book, clock):
        finding = {"finding": "north-t1-step", "verdict": "watch", "size_percent": 3.9, "onset": START}
        assert book.save_findings([finding]) == 1
        assert book.save_findings([finding]) == 0
        clock.time += 7 * DAY
        assert book.save_findings([finding | {"size_percent": 4.1}]) == 1
        kept = book.findings()
        assert len(kept) == 1
        assert kept[0]["size_percent"] == 4.1
        assert kept[0]["first_raised"] == START.isoformat()
        assert kept[0]["state"] == "open"
        assert book.save_findings(kept) == 0  # what the book gives it also takes
        assert book.audit() == []

    def test_a_ruling_holds_for_what_was_ruled_on(self, book):
        finding = {"finding": "f", "verdict": "watch", "size_percent": 3.9}
        book.save_findings([finding])
        assert book.rule("f", "M. Example", "keep measuring", "small, and after the service") == 1
        assert book.findings()[0]["state"] == "ruled"
        book.save_findings([finding | {"size_percent": 4.0}])
        assert book.findings()[0]["state"] == "ruled"
        book.save_findings([finding | {"verdict": "act"}])
        assert book.findings()[0]["state"] == "open"
        ruling = book.rulings().loc[0]
        assert (ruling["who"], ruling["decision"]) == ("M. Example", "keep measuring")
        assert ruling["content"] == finding
        assert book.audit() == []

    def test_what_is_no_longer_found_fades_and_may_come_back(self, book):
        findings = [{"finding": "f", "verdict": "watch"}, {"finding": "g", "verdict": "act"}]
        book.save_findings(findings)
        book.save_findings(findings[:1])
        assert {f["finding"]: f["state"] for f in book.findings()} == {"f": "open", "g": "open"}
        book.save_findings(findings[:1], complete=True)
        assert {f["finding"]: f["state"] for f in book.findings()} == {"f": "open", "g": "faded"}
        book.save_findings(findings, complete=True)
        assert {f["finding"]: f["state"] for f in book.findings()} == {"f": "open", "g": "open"}
        assert book.audit() == []

    def test_a_ruling_needs_a_name_a_reason_and_a_finding(self, book):
        book.save_findings([{"finding": "f"}])
        for told in [("f", " ", "keep", "why"), ("f", "M. Example", "keep", ""), ("f", "M. Example", "", "why")]:
            with pytest.raises(UsageError, match="needs the"):
                book.rule(*told)
        with pytest.raises(UsageError, match=r"no finding 'x'(.|\n)*Findings: f"):
            book.rule("x", "M. Example", "keep", "why")
        with pytest.raises(StoreError, match="key"):
            book.save_findings([{"verdict": "act"}])
        assert len(book.rulings()) == 0

    # --- the ledger ---

    def test_every_change_has_its_entry(self, book):
        one = session("North bay", "Plate A", START)
        book.record(one, measurement("N", 0), **HOW)
        book.set_verdict(one.run, 1, Verdict.STEADY)
        book.hold([Held("a", "not-dicom", "x")])
        book.release(["a"])
        book.note_limits([])
        book.add_log_entry(START, "North bay", "Plate A", "note", "door was open")
        book.save_findings([{"finding": "f"}])
        book.rule("f", "M. Example", "keep", "why")
        ledger = book.ledger()
        assert list(ledger["kind"]) == [
            *("made", "measured", "judged", "held", "released", "limits", "logged", "raised", "ruled")
        ]
        assert list(ledger["seq"]) == list(range(1, 10))
        assert list(ledger["previous"][1:]) == list(ledger["hash"][:-1])
        measured = book.ledger(one.run)["payload"][0]
        assert measured["readings"][0][:3] == ["T1 IR", "1", "good"]
        assert measured["celsius"] == 20.5
        assert datetime.fromisoformat(measured["acquired"]) == START.astimezone(UTC)
        assert book.anchor().seq == 9
