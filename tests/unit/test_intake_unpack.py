"""Archives: taken apart in memory, member by member; bounded; nothing in a name can lead anywhere."""

import io
import tarfile
import zipfile

import numpy as np
import pytest
from intake_site import RECIPE, copied, make_site, run
from numpy.testing import assert_array_equal

from qa import intake
from qa.intake import unpack
from qa.intake.unpack import is_archive, members


@pytest.fixture(scope="module")
def original(tmp_path_factory):
    return run(tmp_path_factory.mktemp("simulated") / "run")


@pytest.fixture
def site(tmp_path):
    return make_site(tmp_path / "site")


def zipped(path, files, **options):
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED, **options) as archive:
        for name, content in files:
            archive.writestr(name, content)
    return path


def tarred(path, files, mode="w"):
    with tarfile.open(path, mode) as archive:
        for name, content in files:
            info = tarfile.TarInfo(name)
            info.size = len(content)
            archive.addfile(info, io.BytesIO(content))
    return path


def files_of(record):
    return [(str(path.relative_to(record.folder)), path.read_bytes()) for path in record.files]


MAKERS = {
    "zip": lambda path, files: zipped(path, files),
    "tar": lambda path, files: tarred(path, files),
    "tar.gz": lambda path, files: tarred(path, files, "w:gz"),
    "tar.bz2": lambda path, files: tarred(path, files, "w:bz2"),
    "tar.xz": lambda path, files: tarred(path, files, "w:xz"),
}


@pytest.mark.parametrize("kind", MAKERS)
def test_an_archive_is_as_good_as_a_folder(site, original, tmp_path, kind):
    copied(original, tmp_path / "folder")
    want = intake.load(intake.gather([tmp_path / "folder"], site, known=()).sessions[0], RECIPE)
    (tmp_path / "in").mkdir()
    path = MAKERS[kind](tmp_path / "in" / "week", [*files_of(original), ("notes/read me.txt", b"night shift")])
    taken = intake.gather([tmp_path / "in"], site, known=())
    (session,) = taken.sessions
    assert (taken.seen, len(session.files), taken.duplicates) == (12, 11, 0)
    assert [(held.path, held.code) for held in taken.held] == [(f"{path}:notes/read me.txt", "not-dicom")]
    assert {file.path for file in session.files} == {f"{path}:{name}" for name, _ in files_of(original)}
    for one, other in zip(intake.load(session, RECIPE).series, want.series, strict=True):
        assert_array_equal(one.frames, other.frames)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["folder", "in", "site"]
    again = intake.gather([path], site, known={file.sha256 for file in session.files})
    assert (again.seen, again.duplicates, len(again.held)) == (12, 11, 1)


@pytest.mark.parametrize("kind", MAKERS)
def test_names_that_would_lead_elsewhere_are_only_names(site, original, tmp_path, kind):
    content = original.files[0].read_bytes()
    bad = ["../../outside.dcm", "/tmp/absolute.dcm", "a/../../b.dcm", "line\nfeed\x1b[31m.dcm"]
    path = MAKERS[kind](tmp_path / "week", [(name, content + bytes([k, 0])) for k, name in enumerate(bad)])
    before = sorted(tmp_path.rglob("*"))
    taken = intake.gather([path], site, known=())
    assert taken.seen == 4
    outside = [p for p in set(tmp_path.rglob("*")) - set(before) if not p.is_relative_to(site.archive)]
    assert outside == []
    assert not any("\n" in held.path or "\x1b" in held.path for held in taken.held)


def test_what_systems_pack_along_is_passed_over(site, original, tmp_path):
    names = ["__MACOSX/._TI40.dcm", "01/._TI40.dcm", ".DS_Store", "01/Thumbs.db"]
    path = zipped(tmp_path / "week.zip", [*files_of(original), *((name, b"junk") for name in names)])
    assert intake.gather([path], site, known=()).seen == 11


def test_links_and_devices_in_a_tar_are_passed_over(site, original, tmp_path):
    path = tmp_path / "week.tar"
    with tarfile.open(path, "w") as archive:
        for kind, target in ((tarfile.SYMTYPE, "/etc/passwd"), (tarfile.LNKTYPE, "x"), (tarfile.FIFOTYPE, "")):
            info = tarfile.TarInfo(f"entry{kind.decode()}")
            info.type, info.linkname = kind, target
            archive.addfile(info)
        archive.add(original.files[0], "one.dcm")
    taken = intake.gather([path], site, known=())
    assert (taken.seen, len(taken.sessions[0].files)) == (1, 1)


@pytest.mark.parametrize("kind", MAKERS)
def test_an_archive_cut_short_gives_what_it_can_and_says_so(site, original, tmp_path, kind):
    path = MAKERS[kind](tmp_path / "week", files_of(original))
    path.write_bytes(path.read_bytes()[: int(0.7 * path.stat().st_size)])
    taken = intake.gather([path], site, known=())
    used = sum(len(session.files) for session in taken.sessions)
    assert taken.seen == used + len(taken.held)
    assert "damaged-archive" in {held.code for held in taken.held}
    assert 0 <= used < 11


@pytest.mark.parametrize("kind", MAKERS)
@pytest.mark.parametrize("seed", range(8))
def test_spoilt_archives_raise_nothing(site, original, tmp_path, kind, seed):
    rng = np.random.default_rng(seed)
    path = MAKERS[kind](tmp_path / "week", files_of(original)[:4])
    content = bytearray(path.read_bytes())
    for at in rng.integers(0, len(content), 1 + 30 * seed):
        content[at] = rng.integers(256)
    path.write_bytes(bytes(content))
    taken = intake.gather([path], site, known=())
    assert taken.seen == sum(len(session.files) for session in taken.sessions) + taken.duplicates + len(taken.held)
    assert taken.seen >= 1


def test_an_encrypted_member_is_held(site, original, tmp_path):
    path = zipped(tmp_path / "week.zip", files_of(original)[:2])
    content = bytearray(path.read_bytes())
    first, central = content.index(b"PK\x03\x04"), content.index(b"PK\x01\x02")
    content[first + 6] |= 1  # general purpose flag, bit 0 (APPNOTE 4.4.4)
    content[central + 8] |= 1
    path.write_bytes(bytes(content))
    taken = intake.gather([path], site, known=())
    assert [held.code for held in taken.held] == ["encrypted"]
    assert len(taken.sessions[0].files) == 1


def test_a_zip_that_grows_beyond_reason(site, original, tmp_path):
    """Like DICOM at its beginning, then 60 MB of zeros: it is left as soon as that is known."""
    head = original.files[0].read_bytes()
    path = tmp_path / "bomb.zip"
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive, archive.open("bomb.dcm", "w") as member:
        member.write(head)
        for _ in range(60):
            member.write(bytes(1_000_000))
    assert path.stat().st_size < 100_000
    taken = intake.gather([path], site, known=())
    assert [held.code for held in taken.held] == ["too-large"]


def test_a_tar_that_grows_beyond_reason(site, tmp_path):
    path = tmp_path / "bomb.tar.gz"
    with tarfile.open(path, "w:gz") as archive:
        for k in range(30):
            info = tarfile.TarInfo(f"{k}.bin")
            info.size = 2_000_000
            archive.addfile(info, io.BytesIO(bytes(2_000_000)))
    taken = intake.gather([path], site, known=())
    assert "too-large" in {held.code for held in taken.held}
    assert taken.seen == len(taken.held) < 30


def test_a_header_that_claims_gigabytes_is_not_read(site, tmp_path):
    """A long name's header of 8 GB (less than it says is there) in a tar."""
    info = tarfile.TarInfo("././@LongLink")
    info.type, info.size = tarfile.GNUTYPE_LONGNAME, 8_000_000_000
    path = tmp_path / "long.tar"
    path.write_bytes(info.tobuf(tarfile.GNU_FORMAT) + bytes(1 << 20))
    taken = intake.gather([path], site, known=())
    assert [held.code for held in taken.held] == ["damaged-archive"]


def test_too_many_members(site, tmp_path, monkeypatch):
    monkeypatch.setattr(unpack, "MOST_MEMBERS", 20)
    files = [(f"{k}.txt", b"x") for k in range(30)]
    for path in (zipped(tmp_path / "many.zip", files), tarred(tmp_path / "many.tar", files)):
        taken = intake.gather([path], site, known=())
        assert taken.held[-1].code == "too-large"
        assert "20" in taken.held[-1].reason or "30" in taken.held[-1].reason


def test_archives_in_archives_are_held(site, original, tmp_path):
    inner = zipped(tmp_path / "inner.zip", files_of(original))
    path = zipped(tmp_path / "outer.zip", [("inner.zip", inner.read_bytes())])
    taken = intake.gather([path], site, known=())
    assert [(held.path, held.code) for held in taken.held] == [(f"{path}:inner.zip", "not-dicom")]


def test_a_dicom_file_that_begins_like_an_archive_is_dicom(site, original, tmp_path):
    """The preamble is free for use by other formats (PS3.10 7.1)."""
    record = copied(original, tmp_path / "in")
    content = record.files[0].read_bytes()
    record.files[0].write_bytes(b"PK\x03\x04" + content[4:])
    assert not is_archive(record.files[0].read_bytes()[:512])
    assert intake.gather([tmp_path / "in"], site, known=()).held == ()


def test_an_empty_archive_holds_nothing(site, tmp_path):
    assert list(members(zipped(tmp_path / "a.zip", []))) == []
    taken = intake.gather([tmp_path / "a.zip"], site, known=())
    assert (taken.seen, taken.held) == (0, ())
