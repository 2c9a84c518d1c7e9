"""The archive of originals: named by content, whole or absent, brought to the disk, and never believed blindly."""

import hashlib
import os
import threading

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from intake_site import RECIPE, make_site, run

from qa import intake
from qa.errors import ArchiveError
from qa.intake.archive import Archive, content_hash


@pytest.fixture
def archive(tmp_path):
    return Archive(tmp_path / "archive")


def kept(archive, content):
    """Put and brought to the disk; gives the name."""
    name = archive.put(content)
    archive.settle()
    return name


def test_content_comes_back_under_its_hash(archive):
    name = kept(archive, b"original")
    assert name == hashlib.sha256(b"original").hexdigest()
    assert archive.read(name) == b"original"
    assert archive.path(name).parent.name == name[:2]


@settings(max_examples=30)
@given(contents=st.lists(st.binary(max_size=300), max_size=6))
def test_any_content(tmp_path_factory, contents):
    archive = Archive(tmp_path_factory.mktemp("a"))
    names = [archive.put(content) for content in contents]
    archive.settle()
    assert [archive.read(name) for name in names] == contents
    assert len({archive.path(name) for name in names}) == len(set(contents))


def test_putting_twice_writes_once(archive):
    name = kept(archive, b"original")
    before = archive.path(name).stat()
    assert kept(archive, b"original") == name
    after = archive.path(name).stat()
    assert (before.st_ino, before.st_mtime_ns) == (after.st_ino, after.st_mtime_ns)


def test_a_half_written_file_of_an_earlier_crash_is_written_again(archive):
    name = content_hash(b"original")
    archive.path(name).parent.mkdir(parents=True)
    archive.path(name).write_bytes(b"orig")
    kept(archive, b"original")
    assert archive.read(name) == b"original"


def test_originals_cannot_be_written_to_by_accident(archive):
    assert archive.path(kept(archive, b"original")).stat().st_mode & 0o222 == 0


def test_every_file_is_synced_before_it_has_its_name_and_every_folder_after(archive, monkeypatch):
    done = []  # what happened, in order
    real_sync, real_replace = os.fsync, os.replace

    def sync(handle):
        real_sync(handle)
        done.append(("sync", os.readlink(f"/proc/self/fd/{handle}")))

    def replace(aside, target):
        done.append(("name", str(aside), str(target)))
        real_replace(aside, target)

    monkeypatch.setattr(os, "fsync", sync)
    monkeypatch.setattr(os, "replace", replace)
    names = [archive.put(bytes([k]) * 50) for k in range(20)]
    archive.settle()
    named = [entry for entry in done if entry[0] == "name"]
    assert {entry[2] for entry in named} == {str(archive.path(name)) for name in names}
    for entry in named:
        assert done.index(("sync", entry[1])) < done.index(entry)
        folder = ("sync", os.path.dirname(entry[2]))
        assert done.index(folder) > done.index(entry)
    done.clear()
    archive.settle()
    assert done == []


def test_an_altered_original_is_noticed(archive):
    name = kept(archive, b"original")
    archive.path(name).chmod(0o644)
    archive.path(name).write_bytes(b"0riginal")
    with pytest.raises(ArchiveError, match="altered") as caught:
        archive.read(name)
    assert str(archive.path(name)) in str(caught.value)
    assert "backup" in str(caught.value)


def test_a_lost_original_is_noticed(archive):
    with pytest.raises(ArchiveError, match="not in the archive"):
        archive.read("ab" * 32)


def test_an_archive_that_cannot_be_written_stops_the_intake(tmp_path):
    (tmp_path / "archive").write_text("a file where the folder should be")
    with pytest.raises(ArchiveError, match="cannot be") as caught:
        kept(Archive(tmp_path / "archive"), b"original")
    assert caught.value.exit_code == 3


def test_a_full_disk_leaves_no_half_file(archive, monkeypatch):
    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(ArchiveError, match="No space left") as caught:
        kept(archive, b"original")
    assert "nothing is lost" in str(caught.value)
    assert [path for path in archive.folder.rglob("*") if path.is_file()] == []


def test_more_files_than_may_wait_in_memory(archive):
    names = [archive.put(k.to_bytes(2, "big")) for k in range(300)]
    archive.settle()
    assert [archive.read(name) for name in names] == [k.to_bytes(2, "big") for k in range(300)]


def test_two_at_once_put_the_same_content(archive):
    contents = [bytes([k % 7]) * 1000 for k in range(60)]
    errors = []

    def work():
        own = Archive(archive.folder)
        try:
            for content in contents:
                own.put(content)
            own.settle()
        except ArchiveError as error:  # pragma: no cover
            errors.append(error)

    threads = [threading.Thread(target=work) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert errors == []
    files = [path for path in archive.folder.rglob("*") if path.is_file()]
    assert sorted(path.stem for path in files) == sorted({content_hash(content) for content in contents})


def test_intake_keeps_every_used_original_and_no_other(tmp_path):
    site = make_site(tmp_path / "site")
    record = run(tmp_path / "in")
    (tmp_path / "in" / "note.txt").write_text("junk")
    (session,) = intake.gather([tmp_path / "in"], site, known=()).sessions
    kept = {path.stem: path.read_bytes() for path in site.archive.rglob("*") if path.is_file()}
    assert kept == {file.sha256: (tmp_path / file.path).read_bytes() for file in session.files}
    assert sorted(kept.values()) == sorted(path.read_bytes() for path in record.files)
    assert {file.size for file in session.files} == {len(content) for content in kept.values()}


def test_lost_and_altered_originals_of_a_run_are_held(tmp_path):
    site = make_site(tmp_path / "site")
    run(tmp_path / "in")
    (session,) = intake.gather([tmp_path / "in"], site, known=()).sessions
    archive = Archive(site.archive)
    lost, altered = (archive.path(file.sha256) for file in session.files[:2])
    lost.unlink()
    altered.chmod(0o644)
    altered.write_bytes(altered.read_bytes()[:-2] + b"\x07\x00")
    again, held = intake.session_from_archive(site, session.files, run=session.run)
    assert {one.sha256: one.code for one in held} == {file.sha256: "archive-lost" for file in session.files[:2]}
    assert len(again.files) == len(session.files) - 2
    assert sum(len(series.frames) for series in intake.load(again, RECIPE).series) == len(session.files) - 2
    for file in session.files:
        archive.path(file.sha256).unlink(missing_ok=True)
    nothing, held = intake.session_from_archive(site, session.files, run=session.run)
    assert nothing is None
    assert len(held) == len(session.files)


def test_an_original_lost_between_gathering_and_loading_is_held(tmp_path):
    site = make_site(tmp_path / "site")
    run(tmp_path / "in")
    (session,) = intake.gather([tmp_path / "in"], site, known=()).sessions
    intake.load(session, RECIPE)  # empties the cache
    Archive(site.archive).path(session.files[0].sha256).unlink()
    got = intake.load(session, RECIPE)
    assert [(one.path, one.code) for one in got.held] == [(session.files[0].path, "archive-lost")]
    assert sum(len(series.frames) for series in got.series) == len(session.files) - 1
