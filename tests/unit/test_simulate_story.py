"""A story told week by week: its rhythm, its events, and the folders that it grows."""

import csv
import json
from datetime import date, time, timedelta
from zoneinfo import ZoneInfo

import pydicom
import pytest
from intake_site import PHANTOMS, PLATE, RECIPE, SCANNERS, make_site
from numpy.testing import assert_allclose

from qa.errors import SiteError, VialbookError
from qa.simulate import grow, simulate_one
from qa.simulate.campaign import Appointment, plan
from qa.simulate.story import Story, read_story

ZONE = ZoneInfo("Europe/Oslo")
START = date(2026, 1, 5)


def appointment(scanner="North", phantom="Plate A", days=7):
    facts = ({"DeviceSerialNumber": SCANNERS[scanner]}, {"PatientID": PHANTOMS[phantom]})
    return Appointment(scanner, 3.0, facts[0], phantom, facts[1], PLATE, RECIPE, days)


def story(*events, **outline):
    made = {"story": {"start": START, "weeks": 10, "seed": 4, "matrix": 48} | outline}
    cast = [{"name": "North", "weekday": 1, "at": time(7, 10)}, {"name": "South", "snr": 90.0}]
    return Story.model_validate(made | {"scanner": cast, "event": list(events)})


def runs(told, *appointments, **options):
    return list(plan(told, appointments or (appointment(),), ZONE, **options))


def test_sessions_keep_their_rhythm():
    days = [run.truth.acquired.date() for run in runs(story(), appointment(days=14))]
    assert days == [date(2026, 1, 6) + timedelta(days=14 * k) for k in range(5)]
    assert all(run.truth.acquired.utcoffset() is not None for run in runs(story()))


def test_any_part_of_a_story_is_as_in_the_whole():
    whole = {run.name: (run.seed, run.truth) for run in runs(story(), appointment(), appointment("South"))}
    part = {run.name: (run.seed, run.truth) for run in runs(story(), appointment(), start=date(2026, 1, 26), weeks=3)}
    assert len(part) == 3
    assert all(whole[name] == same for name, same in part.items())


def test_another_seed_is_another_story():
    one, other = runs(story())[0].truth, runs(story(), seed=5)[0].truth
    assert one.vials == other.vials  # no reference values in this plate, so none is off its certificate
    assert one.rotation_deg != other.rotation_deg


def test_drift_and_step_are_of_their_scanner_and_quantity():
    told = story(
        {"kind": "drift", "scanner": "North", "of": "T1", "percent_per_year": 36.525, "since": START},
        {"kind": "step", "scanner": "North", "of": "T2", "percent": 4.0, "on": date(2026, 2, 1)},
    )
    both = runs(told, appointment(), appointment("South"))
    north, south = ([run for run in both if run.truth.scanner.name == name] for name in SCANNERS)
    for run in north:
        day = run.truth.acquired.date()
        assert_allclose(run.truth.t1_factor, 1 + 0.001 * (day - START).days, rtol=1e-12)
        assert_allclose(run.truth.t2_factor, 1.04 if day >= date(2026, 2, 1) else 1.0)
    assert {(run.truth.t1_factor, run.truth.t2_factor) for run in south} == {(1.0, 1.0)}


def test_ageing_and_bubble_are_of_their_vial_on_every_scanner():
    told = story(
        {"kind": "ageing", "phantom": "Plate A", "vial": "2", "of": "T1", "percent_per_year": -36.525, "since": START},
        {"kind": "bubble", "phantom": "Plate A", "vial": "3", "on": date(2026, 2, 1), "until": date(2026, 2, 20)},
    )
    for run in runs(told, appointment(), appointment("South"), appointment(phantom="Plate B")):
        day, fresh = run.truth.acquired.date(), run.appointment.phantom == "Plate B"
        aged = 1.0 if fresh else 1 - 0.001 * (day - START).days
        assert_allclose(run.truth.vial("2").t1_ms, 1000.0 * aged)
        assert run.truth.vial("2").t2_ms == 100.0
        holed = not fresh and date(2026, 2, 1) <= day <= date(2026, 2, 20)
        assert bool(run.truth.vial("3").bubbles) == holed
        assert not run.truth.vial("1").bubbles


def test_missed_sessions_and_software():
    told = story(
        {"kind": "missed", "scanner": "North", "on": date(2026, 1, 13), "until": date(2026, 1, 20)},
        {"kind": "software", "scanner": "North", "version": "9", "on": date(2026, 2, 1)},
    )
    days = {run.truth.acquired.date(): run.truth.scanner.software for run in runs(told)}
    assert date(2026, 1, 6) in days
    assert date(2026, 1, 13) not in days
    assert date(2026, 1, 20) not in days
    assert all(version == ("9" if day >= date(2026, 2, 1) else "1.0") for day, version in days.items())


MISHAPS = {
    "no-phantom": lambda truth: truth.empty,
    "wrong-coil": lambda truth: truth.scanner.coil == "BODY" and truth.scanner.snr == 37.5,
    "wrong-tr": lambda truth: truth.tr_ms == {"T1 IR": 2500.0, "T2 train": 1500.0},
    "missing-time": lambda truth: truth.skipped == {"T1 IR": (500.0, 1100.0)},
    "scan-omitted": lambda truth: truth.omitted == ("T1 IR",),
}


@pytest.mark.parametrize("fault", MISHAPS)
def test_mishaps_happen_once(fault):
    told = story({"kind": "mishap", "scanner": "North", "on": date(2026, 1, 20), "fault": fault})
    hit = [MISHAPS[fault](run.truth) for run in runs(told)]
    assert hit == [False, False, True] + [False] * 7
    assert [bool(run.truth.note) for run in runs(told)] == hit


@pytest.mark.parametrize(
    ("event", "said"),
    [
        ({"kind": "step", "scanner": "East", "of": "T1", "percent": 1, "on": START}, "no schedule has the scanner"),
        ({"kind": "bubble", "phantom": "C", "vial": "1", "on": START}, "no schedule has the phantom 'C'"),
        ({"kind": "bubble", "phantom": "Plate A", "vial": "99", "on": START}, "has no vial '99'"),
        ({"kind": "mishap", "scanner": "North", "on": date(2026, 1, 7), "fault": "no-phantom"}, "no session is due"),
        (
            {"kind": "mishap", "scanner": "North", "on": date(2026, 1, 6), "fault": "wrong-tr", "scan": "X"},
            "no scan of that|no scan 'X'",
        ),
    ],
)
def test_events_that_cannot_happen_are_named(event, said):
    with pytest.raises(SiteError, match=said):
        runs(story(event))


def test_a_story_file_with_a_mistake_names_the_place(tmp_path):
    path = tmp_path / "story.toml"
    path.write_text('[story]\nstart = 2026-01-05\nsnow = true\n[[event]]\nkind = "flood"\n')
    with pytest.raises(SiteError, match=r"story\.snow") as caught:
        read_story(path)
    assert "event" in str(caught.value)
    path.write_text("[story\n")
    with pytest.raises(SiteError, match="not TOML"):
        read_story(path)
    with pytest.raises(SiteError, match="cannot be read"):
        read_story(tmp_path / "none.toml")


@pytest.fixture
def told_site(tmp_path):
    make_site(tmp_path / "site", phantoms={"Plate A": "QA-A"})
    (tmp_path / "site" / "story.toml").write_text(
        "[story]\nstart = 2026-01-05\nweeks = 2\nmatrix = 48\nfield_of_view_mm = 144.0\n"
        '[[scanner]]\nname = "South"\nform = "enhanced"\nweekday = 2\n'
    )
    return tmp_path / "site"


def test_grow_writes_runs_truth_and_temperatures(told_site, tmp_path):
    seen = []
    folders = grow(told_site, out=tmp_path / "out", progress=lambda done, of: seen.append((done, of)))
    assert [folder.name for folder in folders] == [
        "2026-01-05-north-plate-a",
        "2026-01-07-south-plate-a",
        "2026-01-12-north-plate-a",
        "2026-01-14-south-plate-a",
    ]
    assert seen == [(k, 4) for k in range(1, 5)]
    assert pydicom.dcmread(next(folders[0].rglob("*.dcm"))).DeviceSerialNumber == "SIM-1"
    told = json.loads((tmp_path / "out" / "truth" / f"{folders[1].name}.json").read_text())
    assert told["form"] == "enhanced"
    with (tmp_path / "out" / "temperatures.csv").open() as stream:
        rows = list(csv.DictReader(stream))
    assert [row["scanner"] for row in rows] == ["North", "South", "North", "South"]
    assert all(abs(float(row["celsius"]) - 20.6) < 3 for row in rows)


def test_growing_again_keeps_what_is_there_and_refuses_what_differs(told_site, tmp_path):
    first = grow(told_site, out=tmp_path / "out", weeks=1)
    before = {path: path.stat().st_mtime_ns for path in (tmp_path / "out" / "runs").rglob("*.dcm")}
    more = grow(told_site, out=tmp_path / "out", weeks=2)
    assert more[: len(first)] == first
    assert {path: path.stat().st_mtime_ns for path in before} == before
    with pytest.raises(VialbookError, match="another run of that name"):
        grow(told_site, out=tmp_path / "out", weeks=1, seed=99)


def test_one_run_is_the_same_as_in_the_campaign(told_site, tmp_path):
    grow(told_site, out=tmp_path / "out", weeks=1)
    one = simulate_one(told_site, "South", on=date(2026, 1, 7), out=tmp_path / "one")
    same = tmp_path / "out" / "runs" / one.name
    assert [p.read_bytes() for p in sorted(one.rglob("*.dcm"))] == [p.read_bytes() for p in sorted(same.rglob("*.dcm"))]
    with pytest.raises(SiteError, match="no schedule has scanner 'East'"):
        simulate_one(told_site, "East", on=date(2026, 1, 7), out=tmp_path / "one")
