"""What a user gets to read who does something wrong."""

import json
import shutil
import tomllib

import pytest
from command import ROOT, TODAY, answer, vialbook

INCOMING = ROOT / "sample_site" / "incoming"
ONE_RUN = INCOMING / "2026-09-29-quay-east-tideline-a"


def edit(path, old, new):
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new, 1), encoding="utf-8")


@pytest.mark.parametrize(
    ("file", "old", "new", "said"),
    [
        ("site.toml", "timezone", "timezoen", ("site.toml", "line 5", "timezone")),
        ("site.toml", 'name = "Quay west"', 'nam = "Quay west"', ("site.toml", "name")),
        ("site.toml", 'scanner = "Quay west"', 'scanner = "Quay wset"', ("Quay west",)),
        ("plates/tideline.toml", "x_mm", "x_mn", ("tideline.toml", "x_mm")),
        ("recipes/weekly.toml", "ti_ms", "it_ms", ("weekly.toml", "ti_ms")),
        ("recipes/weekly.toml", "inversion-recovery", "inversion recovery", ("weekly.toml", "inversion-recovery")),
        ("limits.toml", "watch_percent", "watch_per_cent", ("limits.toml", "watch_percent")),
        ("limits.toml", "2025-01-01", "yesterday", ("limits.toml", "line")),
        ("site.toml", "[[scanner]]", "[[scanner]", ("site.toml", "line")),
    ],
)
def test_a_misspelt_key_is_named_with_file_line_and_nearest_key(fresh_site, file, old, new, said):
    edit(fresh_site / file, old, new)
    done = vialbook("due", site=fresh_site, codes=(2,))
    for part in said:
        assert part in done.err
    assert "Traceback" not in done.err


def test_an_unknown_scanner_is_held_with_the_block_to_paste(fresh_site):
    edit(fresh_site / "site.toml", "SIM-0311", "another")
    told = answer("ingest", ONE_RUN, "--no-report", "--today", TODAY, site=fresh_site, codes=(1,))
    assert told["runs"] == []
    assert told["files"]["held"] == told["files"]["seen"]
    assert {one["code"] for one in told["held"]} == {"unknown-scanner"}
    reason = told["held"][0]["reason"]
    block = reason[reason.index("[[scanner]]") :]
    pasted = tomllib.loads(block)["scanner"][0]
    assert pasted["match"] == {"DeviceSerialNumber": "SIM-0311"}
    with (fresh_site / "site.toml").open("a", encoding="utf-8") as stream:
        stream.write("\n" + block.replace(f'name = "{pasted["name"]}"', 'name = "Pasted"') + "\n")
    again = answer("ingest", ONE_RUN, "--no-report", "--today", TODAY, site=fresh_site, codes=(0, 1))
    assert [run["scanner"] for run in again["runs"]] == ["Pasted"]
    assert again["runs"][0]["verdict"] == "void"  # no schedule joins it to a recipe
    assert "[[schedule]]" in again["runs"][0]["reasons"][0]


def test_bad_files_never_stop_the_good_ones(fresh_site, tmp_path):
    shutil.copytree(ONE_RUN, tmp_path / "mixed")
    victims = sorted(path for path in (tmp_path / "mixed").rglob("*.dcm"))
    victims[0].write_bytes(victims[0].read_bytes()[:900])
    (tmp_path / "mixed" / "notes.txt").write_text("=HYPERLINK(1)")
    (tmp_path / "mixed" / "empty").touch()
    told = answer("ingest", tmp_path / "mixed", "--no-report", "--today", TODAY, site=fresh_site, codes=(1,))
    assert len(told["runs"]) == 1
    assert len(told["held"]) == 3
    assert all(one["reason"] for one in told["held"])
    assert told["files"]["seen"] == told["files"]["used"] + 3


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (("ingest", "/nowhere/at/all"), 2, "/nowhere/at/all"),
        (("ingest", str(ONE_RUN), "--celsius", "68"), 2, "degrees Celsius"),
        (("log", "party", "we danced"), 2, "service"),
        (("log", "service", "new gradient coil", "--scanner", "Quay esat"), 2, "Quay east"),
        (("log", "service", "x", "--at", "first of May"), 2, "2026-03-31"),
        (("rule", "F-1", "accept", "--who", "A. Person", "--reason", "seen"), 3, "no book yet"),
        (("drift", "--since", "spring"), 2, "2026-03-31"),
        (("compare",), 3, "no book yet"),
        (("remeasure",), 2, "--all"),
        (("export", "--form", "xls"), 2, "parquet"),
        (("audit", "--anchor", "12"), 2, "anchor"),
        (("migrate",), 3, "no book"),
        (("simulate", "--out", "x", "--scanner", "Quay east"), 2, "--start"),
        (("ingest",), 2, "PATH"),
        (("frobnicate",), 2, "frobnicate"),
    ],
)
def test_wrong_use_says_what_to_do(fresh_site, words, code, said):
    done = vialbook(*words, cwd=fresh_site, codes=(code,))
    assert said in done.err
    assert "Traceback" not in done.err


def test_errors_are_documents_too(tmp_path):
    done = vialbook("due", "--json", cwd=tmp_path, codes=(2,))
    error = json.loads(done.out)["error"]
    assert error["exit_code"] == 2
    assert "vialbook new" in error["remedy"]


def test_new_makes_a_site_that_works_and_never_overwrites(tmp_path):
    made = vialbook("new", tmp_path / "mine", "--name", 'The "old" ward')
    assert "site.toml" in made.out
    answer("due", site=tmp_path / "mine", codes=(1,))
    assert tomllib.loads((tmp_path / "mine" / "site.toml").read_text())["site"]["name"] == 'The "old" ward'
    vialbook("new", tmp_path / "mine", codes=(2,))
    told = vialbook("new", tmp_path / "other", "--json").document
    assert len(told["files"]) == 5
