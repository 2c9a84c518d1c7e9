"""What other programs are given: nothing lost, nothing that a spreadsheet would run."""

import csv
import json
import math
from dataclasses import replace
from datetime import date

import numpy as np
import pandas as pd
import pytest
from book_factory import START, fill, measurement, reading, session
from hypothesis import given, settings
from hypothesis import strategies as st
from store_base import HOW, block

from qa.errors import StoreError
from qa.intake.series import Held
from qa.store import TABLES, open_book
from qa.store.export import FORMULA_STARTS, harmless
from qa.words import Quantity

ODD = "=cmd|' /C calc'!A0"
NAMES = ("Ægir", "東京", 'a "b", c', "line\nend", "semi;colon", "NaT", "nan", "None")


@pytest.fixture
def book(tmp_path):
    with open_book(tmp_path / "book.sqlite") as book:
        yield book


def exported(book, folder, form, table):
    path = folder / f"{table}.{form}"
    assert book.export(folder, form=form, tables=(table,)) == (path,)
    return path


def csv_rows(path):
    with path.open(newline="", encoding="utf-8") as stream:
        return list(csv.DictReader(stream))


# --- formulas ---


@pytest.mark.parametrize(
    "text", ["=1+1", "+A1", "-A1", "@SUM(A1)", "\t=1", "\r=1", "\n=1", "＝1+1", "-1+cmd|x", "=", "-"]
)
def test_a_formula_is_made_text(text):
    assert harmless(text) == f"'{text}"


@pytest.mark.parametrize("text", ["", "T1 IR", "1", "-1", "+2.5e3", "-0.13", "a=b", "vial -1", "'=1"])
def test_what_is_no_formula_stays(text):
    assert harmless(text) == text


@settings(max_examples=60)
@given(text=st.text(max_size=12))
def test_guarding_twice_is_guarding_once_and_loses_nothing(text):
    once = harmless(text)
    assert harmless(once) == once
    assert once in (text, f"'{text}")
    assert once[:1] not in FORMULA_STARTS or math.isfinite(float(once)) or "n" in once.lower()


def test_no_cell_of_any_table_starts_a_formula(book, tmp_path):
    one = replace(session("North bay", ODD, START), scanner=ODD)
    bad = replace(reading(ODD, ODD, Quantity.T1, ODD, 900.0, 900.0), notes=(ODD,), method_version=ODD)
    book.record(
        replace(one, facts={ODD: ODD}),
        replace(measurement("N", 0), readings=(bad,), software=ODD, coil=ODD, celsius_source=ODD),
        method_fingerprint=ODD,
        reason=ODD,
    )
    book.set_verdict(one.run, 1, "watch", [ODD])
    book.add_log_entry(START, ODD, ODD, "note", ODD, who=ODD)
    book.hold([Held(ODD, ODD, ODD)])
    book.note_limits([block(scanner=ODD)])
    book.save_findings([{"finding": ODD, "verdict": "watch", "cause": ODD, "vials": [ODD]}])
    book.rule(ODD, ODD, ODD, ODD)
    cells = 0
    for path in book.export(tmp_path / "out"):
        for row in csv_rows(path):
            for cell in row.values():
                cells += "cmd" in cell
                assert not cell.startswith(FORMULA_STARTS) or math.isfinite(float(cell)), (path.name, cell)
    assert cells > 30


# --- nothing lost ---


def test_every_table_is_written_in_every_form_with_rows_and_without(book, tmp_path):
    for name in ("empty", "filled"):
        if name == "filled":
            fill(book, weeks=2, vials=4)
            book.hold([Held("a.dcm", "truncated", "ends early", "a" * 64)])
        for form in ("csv", "json", "parquet"):
            paths = book.export(tmp_path / name / form, form=form)
            assert [path.name for path in paths] == [f"{table}.{form}" for table in TABLES]
    for table in TABLES:
        rows = len(book.table(table))
        assert (tmp_path / "empty" / "csv" / f"{table}.csv").read_text(encoding="utf-8").strip() != ""
        assert len(json.loads((tmp_path / "filled" / "json" / f"{table}.json").read_text(encoding="utf-8"))) == rows
        assert len(pd.read_parquet(tmp_path / "filled" / "parquet" / f"{table}.parquet")) == rows


def test_readings_survive_parquet_bit_for_bit(book, tmp_path):
    fill(book, weeks=3, vials=5)
    kept = book.table("readings")
    back = pd.read_parquet(exported(book, tmp_path, "parquet", "readings"))
    assert list(back.columns) == list(kept.columns)
    for name in kept.columns:
        assert list(back[name]) == list(kept[name]), name
    assert str(back["acquired"].dt.tz) == "UTC"


def test_readings_survive_json_and_csv_number_for_number(book, tmp_path):
    fill(book, weeks=3, vials=5)
    kept = book.table("readings")
    from_json = json.loads(exported(book, tmp_path, "json", "readings").read_text(encoding="utf-8"))
    from_csv = csv_rows(exported(book, tmp_path, "csv", "readings"))
    for name in ("value_ms", "u_ms", "deviation_percent", "celsius", "u_noise_ms"):
        assert [row[name] for row in from_json] == list(kept[name])
        assert [float(row[name]) for row in from_csv] == list(kept[name])
    for rows in (from_json, from_csv):
        assert [pd.Timestamp(row["acquired"]) for row in rows] == list(kept["acquired"])
        assert [row["vial"] for row in rows] == list(kept["vial"])


def test_absent_numbers_are_null_and_never_nan(book, tmp_path):
    none = replace(reading("1", "T1 IR", Quantity.T1, "ir", None, 900.0), reference_ms=float("nan"))
    one = session("North bay", "Plate A", START)
    book.record(one, replace(measurement("N", 0, celsius=None), readings=(none,), placement=None), **HOW)
    book.save_findings([{"finding": "f", "size_percent": float("nan"), "interval": [float("-inf"), 1.0]}])
    for table, absent in (("readings", "value_ms"), ("runs", "judged_at"), ("runs", "scale"), ("held", None)):
        text = exported(book, tmp_path, "json", table).read_text(encoding="utf-8")
        rows = json.loads(text, parse_constant=lambda word: pytest.fail(f"{word} is no JSON"))
        assert all(row[absent] is None for row in rows)
    finding = json.loads(exported(book, tmp_path, "json", "findings").read_text(encoding="utf-8"))[0]
    assert (finding["size_percent"], finding["interval"]) == (None, [None, 1.0])
    row = csv_rows(exported(book, tmp_path, "csv", "readings"))[0]
    assert (row["value_ms"], row["reference_ms"], row["celsius"]) == ("", "", "")
    assert np.isnan(pd.read_parquet(exported(book, tmp_path, "parquet", "readings")).loc[0, "value_ms"])


@pytest.mark.parametrize("name", NAMES)
def test_names_come_through_as_they_are(book, tmp_path, name):
    book.record(session(name, "Plate A", START), measurement(name, 0, 4, software=name), **HOW)
    book.save_findings([{"finding": "f", "sentence": name, "vials": [name]}])
    for table, column in (("runs", "scanner"), ("runs", "software"), ("findings", "sentence")):
        assert json.loads(exported(book, tmp_path, "json", table).read_text(encoding="utf-8"))[0][column] == name
        assert csv_rows(exported(book, tmp_path, "csv", table))[0][column] == name
        assert pd.read_parquet(exported(book, tmp_path, "parquet", table)).loc[0, column] == name
    assert json.loads(csv_rows(tmp_path / "findings.csv")[0]["vials"]) == [name]


def test_text_that_is_no_text_stops_no_export(book, tmp_path):
    odd = "null \0 and lone \udce4 surrogate"
    one = session("North bay", "Plate A", START)
    book.record(replace(one, facts={"Odd": odd}), replace(measurement("N", 0, 4), software=odd), **HOW)
    book.save_findings([{"finding": "f", "sentence": odd, "reasons": [odd]}])
    book.hold([Held(f"in/{odd}", "not-dicom", odd)])
    for form in ("csv", "json", "parquet"):
        for path in book.export(tmp_path / form, form=form):
            assert b"\0" not in path.read_bytes() or form == "parquet"
    shown = r"null \x00 and lone \udce4 surrogate"
    assert csv_rows(tmp_path / "csv" / "findings.csv")[0]["sentence"] == shown
    assert pd.read_parquet(tmp_path / "parquet" / "held.parquet").loc[0, "reason"] == shown
    assert json.loads((tmp_path / "json" / "findings.json").read_text(encoding="utf-8"))[0]["sentence"] == shown
    assert book.audit() == []


def test_days_and_lists_are_readable_in_csv(book, tmp_path):
    book.note_limits([block(since=date(2025, 3, 1), vials=("1", "2"))])
    row = csv_rows(exported(book, tmp_path, "csv", "limits"))[0]
    assert row["since"] == "2025-03-01"
    assert json.loads(row["block"])["vials"] == ["1", "2"]


# --- what cannot be done ---


def test_a_table_that_is_not_there_and_a_place_that_cannot_be_written_are_named(book, tmp_path):
    with pytest.raises(StoreError, match=r"no table 'dishes'(.|\n)*readings"):
        book.table("dishes")
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(StoreError, match="file cannot be written"):
        book.export(tmp_path / "file")
