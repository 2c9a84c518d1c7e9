"""The main job through the real command."""

import csv
import json
import shutil
import signal
import subprocess
import sys
import time

from command import ROOT, TODAY, answer, copy_site, vialbook

ONE_RUN = "2026-09-29-quay-east-tideline-a"
INCOMING = ROOT / "sample_site" / "incoming"


def test_the_sample_site_tells_its_story(taken_in):
    site, done = taken_in
    assert "280 files: 278 used, 0 known already, 2 held." in done.out
    assert "held: [truncated]" in done.out
    assert "held: [not-dicom]" in done.out
    assert f"Front page: {site / 'pages' / 'index.html'}" in done.out
    drift = answer("drift", "--today", TODAY, site=site, codes=(0, 1))
    moved = [one for one in drift["findings"] if one["state"] in ("open", "ruled") and one["scanner"] == "Lighthouse"]
    stepped = [one for one in moved if one["quantity"] == "T2" and one["cause"] == "scanner"]
    assert stepped, drift["findings"]
    assert 4.0 < stepped[0]["size_percent"] < 10.0  # the story says 7 %
    assert "2026-11-01" <= stepped[0]["onset"] <= "2026-11-12"  # and the fifth of November
    assert any(entry["kind"] == "software" for entry in stepped[0]["log_entries"])


def test_a_second_ingest_changes_nothing(own_site):
    before = answer("audit", site=own_site)["anchor"]
    again = answer("ingest", INCOMING / ONE_RUN, "--no-report", "--today", TODAY, site=own_site)
    assert again["runs"] == []
    assert again["files"]["duplicate"] == again["files"]["seen"] > 0
    assert answer("audit", site=own_site)["anchor"] == before


def test_one_run_as_json(fresh_site):
    told = answer("ingest", INCOMING / ONE_RUN, "--celsius", "20.4", "--today", TODAY, site=fresh_site, codes=(0, 1))
    (run,) = told["runs"]
    assert run["scanner"] == "Quay east"
    assert run["phantom"] == "Tideline A"
    assert run["temperature_c"] == 20.4
    assert run["acquired"].startswith("2026-09-29T05:47:00")
    assert len(run["readings"]) == 24
    for reading in run["readings"]:
        if reading["state"] in ("good", "marked"):
            assert reading["u_ms"] > 0
            parts = reading["budget"]
            combined = (parts["noise_ms"] ** 2 + parts["model_ms"] ** 2 + parts["region_ms"] ** 2) ** 0.5
            assert abs(combined - reading["u_ms"]) < 1e-6 * reading["u_ms"]
        else:
            assert reading["value_ms"] is None
            assert reading["notes"]
    assert (fresh_site / "pages" / "runs" / f"{run['run']}.html").exists()


def test_files_of_one_run_may_come_in_two_parts(fresh_site, tmp_path):
    files = sorted(path for path in (INCOMING / ONE_RUN).rglob("*") if path.is_file())
    for number, part in enumerate((files[: len(files) // 2], files[len(files) // 2 :])):
        (tmp_path / str(number)).mkdir()
        for path in part:
            shutil.copy(path, tmp_path / str(number) / path.name)
    first = answer("ingest", tmp_path / "0", "--no-report", "--today", TODAY, site=fresh_site, codes=(0, 1))
    second = answer("ingest", tmp_path / "1", "--no-report", "--today", TODAY, site=fresh_site, codes=(0, 1))
    assert first["runs"][0]["run"] == second["runs"][0]["run"]
    assert second["runs"][0]["generation"] == first["runs"][0]["generation"] + 1
    whole = copy_site(tmp_path / "whole", with_data=False)
    at_once = answer("ingest", INCOMING / ONE_RUN, "--no-report", "--today", TODAY, site=whole, codes=(0, 1))
    assert at_once["runs"][0]["readings"] == second["runs"][0]["readings"]


def _readings(site, folder):
    vialbook("export", "--what", "readings", "--out", folder, site=site)
    with (folder / "readings.csv").open(encoding="utf-8") as stream:
        return list(csv.DictReader(stream))


def test_killed_at_any_moment_a_rerun_ends_in_the_same_state(fresh_site, taken_in, tmp_path):
    runs = sorted(path for path in INCOMING.iterdir() if path.is_dir() and "quay-west" in path.name)
    for delay in (0.8, 1.3, 1.8):
        words = [sys.executable, "-c", "from qa.cli import main; main()", "ingest", *map(str, runs)]
        child = subprocess.Popen([*words, "--site", str(fresh_site), "--quiet"], stdout=subprocess.DEVNULL)
        time.sleep(delay)
        child.send_signal(signal.SIGKILL)
        child.wait()
    vialbook("ingest", *runs, "--no-report", "--today", TODAY, site=fresh_site, codes=(0, 1))
    assert answer("audit", site=fresh_site)["sound"]
    unbroken = [row for row in _readings(taken_in[0], tmp_path / "whole") if row["scanner"] == "Quay west"]
    assert _readings(fresh_site, tmp_path / "killed") == unbroken


def test_two_ingests_at_once_both_succeed(fresh_site):
    parts = [
        sorted(path for path in INCOMING.iterdir() if path.is_dir() and name in path.name)[:3]
        for name in ("quay-west", "lighthouse")
    ]
    words = [sys.executable, "-c", "from qa.cli import main; main()", "ingest", "--no-report", "--json", "--quiet"]
    children = [
        subprocess.Popen(
            [*words, "--site", str(fresh_site), *map(str, part)], stdout=subprocess.PIPE, stderr=subprocess.PIPE
        )
        for part in parts
    ]
    said = [child.communicate(timeout=300) for child in children]
    assert all(child.returncode in (0, 1) for child in children), said
    assert sum(len(json.loads(out)["runs"]) for out, _ in said) == 6
    assert answer("audit", site=fresh_site)["sound"]
