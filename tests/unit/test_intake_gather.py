"""From paths to sessions: grouped by study, scanner and phantom; each file counted once; folders mean nothing."""

import os
import shutil
import tomllib
from datetime import datetime
from zoneinfo import ZoneInfo

import pytest
from intake_site import FILES, PHANTOMS, SCANNERS, edit, make_site, run

from qa import intake
from qa.errors import UsageError
from qa.intake.gather import run_id


def counted(taken):
    """The promise: seen = files of sessions + duplicates + held."""
    used = sum(len(session.files) for session in taken.sessions)
    assert taken.seen == used + taken.duplicates + len(taken.held)
    return used, taken.duplicates, len(taken.held)


@pytest.fixture
def site(tmp_path):
    return make_site(tmp_path / "site")


def take(site, *paths, known=()):
    return intake.gather(paths, site, known=known)


@pytest.mark.parametrize("form", sorted(FILES))
def test_one_run_is_one_session(site, tmp_path, form):
    record = run(tmp_path / "in", form)
    taken = take(site, tmp_path / "in")
    assert counted(taken) == (FILES[form], 0, 0)
    (session,) = taken.sessions
    assert (session.scanner, session.phantom, session.study_uid) == ("North", "Plate A", record.study_uid)
    assert session.field_t == 3.0
    assert {file.path for file in session.files} == {str(path) for path in record.files}
    assert session.facts["DeviceSerialNumber"] == "SIM-1"
    assert session.remarks == ()
    assert session.acquired.tzinfo == ZoneInfo("Europe/Oslo")


def test_runs_are_told_apart_by_study_scanner_and_phantom_never_by_folder(site, tmp_path):
    """All files of six runs thrown together, then each into a folder of its own: the same six sessions."""
    records = [run(tmp_path / f"a{k}", seed=k) for k in (1, 2)]
    records += [run(tmp_path / f"s{k}", seed=k, scanner="South") for k in (3, 4)]
    records += [run(tmp_path / f"p{k}", seed=k, phantom="Plate B") for k in (5, 6)]
    heap, strewn = tmp_path / "heap", tmp_path / "strewn"
    heap.mkdir()
    for k, path in enumerate(path for record in records for path in record.files):
        shutil.copy(path, heap / f"{k:03d}")
        (strewn / f"{k * 7919 % 101:03d}" / str(k)).mkdir(parents=True)
        shutil.copy(path, strewn / f"{k * 7919 % 101:03d}" / str(k) / "IM0001")
    found = [
        {(s.run, s.scanner, s.phantom, len(s.files)) for s in take(site, where).sessions} for where in (heap, strewn)
    ]
    assert found[0] == found[1]
    assert len(found[0]) == 6
    assert {(scanner, phantom) for _, scanner, phantom, _ in found[0]} == {
        ("North", "Plate A"),
        ("South", "Plate A"),
        ("North", "Plate B"),
    }
    assert {count for *_, count in found[0]} == {FILES["classic"]}


def test_one_study_with_two_phantoms_is_two_runs(site, tmp_path):
    first, second = run(tmp_path / "a"), run(tmp_path / "b", seed=6, phantom="Plate B")
    for path in second.files:
        edit(path, StudyInstanceUID=first.study_uid)
    taken = take(site, tmp_path)
    assert {(s.phantom, len(s.files)) for s in taken.sessions} == {("Plate A", 11), ("Plate B", 11)}
    assert len({s.run for s in taken.sessions}) == 2
    assert {s.study_uid for s in taken.sessions} == {first.study_uid}


def test_a_runs_name_is_the_same_at_every_intake(site, tmp_path):
    record = run(tmp_path / "in")
    one, two = take(site, tmp_path / "in").sessions[0], take(site, tmp_path / "in").sessions[0]
    assert one.run == two.run == run_id(record.study_uid, "North", "Plate A")
    assert len(one.run) == 12


def test_known_files_and_copies_are_duplicates(site, tmp_path):
    record = run(tmp_path / "in")
    shutil.copytree(tmp_path / "in", tmp_path / "copy")
    taken = take(site, tmp_path / "in", tmp_path / "copy")
    assert counted(taken) == (11, 11, 0)
    hashes = {file.sha256 for file in taken.sessions[0].files}
    again = take(site, tmp_path / "in", known=hashes)
    assert counted(again) == (0, 11, 0)
    assert again.sessions == ()
    part = take(site, tmp_path / "in", known=set(list(hashes)[:4]))
    assert counted(part) == (7, 4, 0)
    assert len(record.files) == 11


def test_a_file_named_twice_and_a_folder_inside_another_are_read_once(site, tmp_path):
    record = run(tmp_path / "in")
    taken = take(site, tmp_path / "in", record.files[0], tmp_path / "in" / "01")
    assert counted(taken) == (11, 0, 0)


def test_single_files_can_be_named(site, tmp_path):
    record = run(tmp_path / "in")
    assert counted(take(site, *record.files[:3])) == (3, 0, 0)


def test_what_systems_leave_in_folders_is_passed_over(site, tmp_path):
    run(tmp_path / "in")
    for name in (".DS_Store", "Thumbs.db", "desktop.ini", "._TI40.dcm"):
        (tmp_path / "in" / name).write_bytes(b"junk")
    (tmp_path / "in" / "empty").mkdir()
    assert counted(take(site, tmp_path / "in")) == (11, 0, 0)


def test_junk_among_the_files_is_held_and_hides_nothing(site, tmp_path):
    run(tmp_path / "in")
    (tmp_path / "in" / "notes.txt").write_text("scanned by the night shift")
    (tmp_path / "in" / "01" / "export.log").write_bytes(bytes(range(256)) * 40)
    taken = take(site, tmp_path / "in")
    assert counted(taken) == (11, 0, 2)
    assert {held.code for held in taken.held} == {"not-dicom"}


def test_links_to_files_are_followed_and_loops_are_not(site, tmp_path):
    record = run(tmp_path / "store")
    folder = tmp_path / "in"
    folder.mkdir()
    for k, path in enumerate(record.files):
        (folder / f"{k}.dcm").symlink_to(path)
    (folder / "loop").symlink_to(folder)
    (folder / "up").symlink_to(tmp_path)
    (folder / "self").symlink_to(folder / "self")
    (folder / "gone").symlink_to(tmp_path / "no such file")
    taken = take(site, folder)
    assert counted(taken) == (11, 0, 2)
    assert {(os.path.basename(held.path), held.code) for held in taken.held} == {
        ("self", "unreadable"),
        ("gone", "unreadable"),
    }


def test_pipes_are_passed_over(site, tmp_path):
    run(tmp_path / "in")
    os.mkfifo(tmp_path / "in" / "pipe")
    assert counted(take(site, tmp_path / "in")) == (11, 0, 0)


def test_a_path_that_is_not_there_is_wrong_use(site, tmp_path):
    with pytest.raises(UsageError, match="no such file or folder") as caught:
        take(site, tmp_path / "nowhere")
    assert str(tmp_path / "nowhere") in str(caught.value)
    assert caught.value.exit_code == 2


def test_nothing_at_all_is_nothing(site, tmp_path):
    (tmp_path / "empty").mkdir()
    taken = take(site, tmp_path / "empty")
    assert (taken.sessions, taken.held, taken.seen, taken.duplicates) == ((), (), 0, 0)


def test_progress_is_told(site, tmp_path):
    run(tmp_path / "in")
    told = []
    intake.gather([tmp_path / "in"], site, known=(), progress=lambda *step: told.append(step))
    assert told[0] == ("reading files", 0, 11)
    assert told[-1] == ("reading files", 11, 11)


@pytest.mark.parametrize("form", ["classic", "enhanced"])
def test_an_unknown_scanner_is_held_with_the_block_to_paste(tmp_path, form):
    run(tmp_path / "in", form, scanner="South")
    lacking = {"North": SCANNERS["North"]}
    taken = take(make_site(tmp_path / "site", scanners=lacking), tmp_path / "in")
    assert {held.code for held in taken.held} == {"unknown-scanner"}
    assert counted(taken) == (0, 0, FILES[form])
    (table,) = block_in(taken.held[0].reason)["scanner"]
    assert table["match"] == {"DeviceSerialNumber": "SIM-2"}
    assert table["field_t"] == 3.0
    # Pasted as it is, the block makes the scanner known.
    mended = make_site(tmp_path / "site", scanners=lacking | {table["name"]: table["match"]["DeviceSerialNumber"]})
    assert [s.scanner for s in take(mended, tmp_path / "in").sessions] == [table["name"]]


def test_an_unknown_phantom_is_held_with_the_block_to_paste(tmp_path):
    run(tmp_path / "in", phantom="Plate B")
    lacking = {"Plate A": PHANTOMS["Plate A"]}
    taken = take(make_site(tmp_path / "site", phantoms=lacking), tmp_path / "in")
    assert {held.code for held in taken.held} == {"unknown-phantom"}
    (table,) = block_in(taken.held[0].reason)["phantom"]
    assert table["match"] == {"PatientID": "QA-B"}
    mended = make_site(tmp_path / "site", phantoms=lacking | {table["name"]: table["match"]["PatientID"]})
    assert [s.phantom for s in take(mended, tmp_path / "in").sessions] == [table["name"]]


def block_in(reason):
    """The TOML that a reason holds: from the first [[ on."""
    return tomllib.loads(reason[reason.index("[[") :])


def test_a_serial_that_would_break_toml_is_quoted(tmp_path):
    record = run(tmp_path / "in", facts={"DeviceSerialNumber": 'S"]\n[[x]]\\'})
    assert len(record.files) == 11
    taken = take(make_site(tmp_path / "site"), tmp_path / "in")
    tables = block_in(taken.held[0].reason)
    assert list(tables) == ["scanner"]
    assert tables["scanner"][0]["match"]["DeviceSerialNumber"].startswith('S"]')


def test_files_without_a_serial_get_a_block_with_what_else_there_is(tmp_path):
    run(tmp_path / "in", left_out=("DeviceSerialNumber",))
    taken = take(make_site(tmp_path / "site"), tmp_path / "in")
    (table,) = block_in(taken.held[0].reason)["scanner"]
    assert table["match"] == {"ManufacturerModelName": "Model 0", "Manufacturer": "Invented Magnetics"}


def test_a_scanner_can_be_matched_by_any_keyword_and_by_numbers(tmp_path):
    site = make_site(tmp_path / "site")
    text = (site.folder / "site.toml").read_text()
    text = text.replace('{ DeviceSerialNumber = "SIM-1" }', '{ StationName = "BAY1", MagneticFieldStrength = 3 }')
    (site.folder / "site.toml").write_text(text)
    from qa.site import load_site

    run(tmp_path / "in", facts={"StationName": "BAY1"})
    (session,) = take(load_site(site.folder), tmp_path / "in").sessions
    assert session.scanner == "North"


def test_the_earliest_acquisition_dates_the_run_in_the_sites_time_zone(site, tmp_path):
    record = run(tmp_path / "in")
    for path in record.files:
        edit(path, TimezoneOffsetFromUTC=None)
    (session,) = take(site, tmp_path / "in").sessions
    # 07:30 plus four minutes for the first scan; without an offset the clock is the site's.
    assert session.acquired == datetime(2026, 3, 2, 7, 34, tzinfo=ZoneInfo("Europe/Oslo"))


def test_the_offset_in_the_files_counts(site, tmp_path):
    run(tmp_path / "in")  # written with +0000
    (session,) = take(site, tmp_path / "in").sessions
    assert session.acquired.isoformat() == "2026-03-02T08:34:00+01:00"


def test_field_strength_is_checked(site, tmp_path):
    record = run(tmp_path / "in")
    for path in record.files:
        edit(path, MagneticFieldStrength=1.5)
    (session,) = take(site, tmp_path / "in").sessions
    assert [remark.code for remark in session.remarks] == ["field-differs"]
    for path in record.files:
        edit(path, MagneticFieldStrength=None)
    (session,) = take(site, tmp_path / "in").sessions
    assert session.field_t == 3.0
    for path in record.files:
        edit(path, MagneticFieldStrength=30000)  # gauss
    (session,) = take(site, tmp_path / "in").sessions
    assert (session.field_t, session.remarks) == (3.0, ())
