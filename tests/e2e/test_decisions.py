"""From a finding to a ruling, and what the auditor sees of it, through the real command."""

import json
import sqlite3

import pandas as pd
import pytest
from command import TODAY, answer, vialbook


def _open_findings(site):
    told = answer("drift", site=site, codes=(0, 1))
    return [one for one in told["findings"] if one["state"] == "open"]


def _step(site):
    return next(one for one in _open_findings(site) if one["scanner"] == "Lighthouse" and one["cause"] == "scanner")


def test_a_dismissed_finding_no_longer_speaks_against_the_scanner(own_site):
    one = _step(own_site)
    told = answer(
        "rule", one["finding"], "dismiss", "--who", "A. Physicist", "--reason", "coil was loose", site=own_site
    )
    assert told["log_entries"] == []
    after = answer("drift", site=own_site, codes=(0, 1))
    same = next(other for other in after["findings"] if other["finding"] == one["finding"])
    assert same["state"] == "ruled"
    assert same["rulings"][0]["who"] == "A. Physicist"
    assert same["rulings"][0]["reason"] == "coil was loose"
    assert same["first_raised"] == one["first_raised"]
    audit = vialbook("audit", site=own_site)
    assert "A. Physicist" in audit.out
    assert "coil was loose" in audit.out


def test_an_accepted_change_starts_a_new_baseline_and_is_not_swallowed(own_site):
    one = _step(own_site)
    told = answer("rule", one["finding"], "accept", "--who", "A. Physicist", "--reason", "new coil", site=own_site)
    assert told["log_entries"]
    entries = answer("log", site=own_site, schema="log-list")["entries"]
    restart = next(entry for entry in entries if entry["entry"] == told["log_entries"][0])
    assert restart["restart_baseline"]
    assert restart["scanner"] == "Lighthouse"
    after = answer("drift", site=own_site, codes=(0, 1))
    standing = [other for other in after["findings"] if other["state"] == "open" and other["scanner"] == "Lighthouse"]
    assert not [other for other in standing if other["kind"] == "step" and other["cause"] == "scanner"]


def test_a_ruling_needs_a_name_a_reason_and_a_known_decision(own_site):
    finding = _step(own_site)["finding"]
    vialbook("rule", finding, "accept", "--who", " ", "--reason", "x", site=own_site, codes=(2,))
    vialbook("rule", finding, "accept", "--who", "A", "--reason", "", site=own_site, codes=(2,))
    unknown = vialbook("rule", finding, "shrug", "--who", "A", "--reason", "x", site=own_site, codes=(2,))
    assert "dismiss" in unknown.err
    vialbook("rule", "F-0000", "accept", "--who", "A", "--reason", "x", site=own_site, codes=(2,))
    assert answer("audit", site=own_site)["sound"]


def test_a_restart_of_the_baseline_judges_later_runs_again(own_site):
    told = answer(
        *("log", "service", "new gradient amplifier", "--scanner", "lighthouse", "--at", "2026-11-05"),
        *("--restart-baseline", "--who", "Engineer"),
        site=own_site,
    )
    assert len(told["judged_again"]) == 4  # the runs of 9, 16, 23 and 30 November
    assert answer("audit", site=own_site)["sound"]


def test_a_logged_temperature_counts_when_runs_are_measured_again(own_site):
    runs = pd.read_json(_exported(own_site, "runs", "json"))
    run = runs[runs["scanner"] == "Quay east"].iloc[0]
    at = pd.Timestamp(run["acquired"]).isoformat()
    answer("log", "temperature", "--scanner", "Quay east", "--celsius", "25.5", "--at", at, site=own_site)
    told = answer("remeasure", run["run"], "--no-report", "--reason", "temperature found", site=own_site)
    (change,) = told["runs"]
    assert (change["old_generation"], change["new_generation"]) == (1, 2)
    assert all(row["old_ms"] == row["new_ms"] for row in change["rows"])  # as measured: nothing moves
    readings = pd.read_csv(_exported(own_site, "readings", "csv"))
    both = readings[(readings["run"] == run["run"]) & readings["value_at_reference_ms"].notna()]
    by_generation = both.groupby("generation")["value_at_reference_ms"].sum()
    assert by_generation[1] != by_generation[2]
    assert set(both[both["generation"] == 2]["celsius"]) == {25.5}
    assert answer("audit", site=own_site)["sound"]


def _exported(site, what, form):
    answer("export", "--what", what, "--form", form, "--out", site / "out", site=site)
    return site / "out" / f"{what}.{form}"


@pytest.mark.parametrize(
    ("statement", "code"),
    [
        (
            "UPDATE reading SET value_ms = value_ms * 1.01 WHERE rowid IN (SELECT rowid FROM reading LIMIT 1)",
            "row-altered",
        ),
        ("UPDATE measurement SET verdict = 'steady' WHERE verdict <> 'steady'", "row-altered"),
        ("DELETE FROM log_entry", "row-missing"),
        ("DELETE FROM ledger WHERE seq = (SELECT max(seq) FROM ledger)", "chain-broken"),
        ("UPDATE ledger SET payload = replace(payload, 'Quay', 'Kay')", "chain-broken"),
    ],
)
def test_the_audit_sees_what_was_altered(own_site, statement, code):
    assert answer("audit", "--no-originals", site=own_site)["sound"]
    with sqlite3.connect(own_site / "book.sqlite") as connection:
        assert connection.execute(statement).rowcount > 0
    connection.close()
    told = answer("audit", "--no-originals", site=own_site, codes=(1,))
    assert code in {problem["code"] for problem in told["problems"] if problem["grave"]}


def test_the_audit_sees_an_altered_and_a_missing_original(own_site):
    originals = sorted(path for path in (own_site / "archive").rglob("*") if path.is_file())
    originals[0].chmod(0o644)
    originals[0].write_bytes(originals[0].read_bytes() + b"x")
    originals[1].unlink()
    told = answer("audit", site=own_site, codes=(1,))
    assert {problem["code"] for problem in told["problems"]} == {"original-altered", "original-missing"}


def test_what_was_known_then(own_site):
    early = answer("drift", "--as-of", "2026-01-01", site=own_site)
    assert early["findings"] == []
    assert early["streams"] == []


def test_compare_and_due_and_report_as_documents(own_site):
    agreement = answer("compare", site=own_site, codes=(0, 1))
    assert {"Quay east", "Quay west", "Lighthouse"} <= set(agreement["scanners"])
    due = answer("due", "--today", TODAY, site=own_site, codes=(0, 1))
    assert {row["scanner"] for row in due["due"]} == {"Quay east", "Quay west", "Lighthouse"}
    front = answer("report", "--single-file", "--out", own_site / "mail", "--today", TODAY, site=own_site)["front_page"]
    text = (own_site / "mail" / "index.html").read_text(encoding="utf-8")
    assert front.endswith("index.html")
    assert "not a medical device" in text.lower()
    assert '<script src="http' not in text


def test_every_table_can_be_exported_in_every_form(own_site):
    for form in ("csv", "json", "parquet"):
        files = answer("export", "--form", form, "--out", own_site / form, site=own_site)["files"]
        assert len(files) == 8
    frames = [
        pd.read_csv(own_site / "csv" / "readings.csv"),
        pd.DataFrame(json.loads((own_site / "json" / "readings.json").read_text())),
        pd.read_parquet(own_site / "parquet" / "readings.parquet"),
    ]
    for frame in frames[1:]:
        assert len(frame) == len(frames[0])
        assert list(frame.columns) == list(frames[0].columns)
        pd.testing.assert_series_equal(frame["value_ms"].astype(float), frames[0]["value_ms"].astype(float), rtol=1e-12)
