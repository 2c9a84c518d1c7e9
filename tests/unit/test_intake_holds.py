"""Files that cannot be used: each is held with its code, a whole sentence, and what to do; the others go on."""

import os
import shutil
import tempfile
import zlib
from pathlib import Path

import numpy as np
import pydicom
import pytest
from intake_site import FILES, RECIPE, change, copied, edit, make_site, run
from pydicom.dataset import Dataset
from pydicom.sequence import Sequence
from pydicom.uid import DeflatedExplicitVRLittleEndian

from qa import intake
from qa.intake.gather import _Taking
from qa.intake.holds import CODES, hold


@pytest.fixture
def site(tmp_path):
    return make_site(tmp_path / "site")


@pytest.fixture(scope="module")
def original(tmp_path_factory):
    return run(tmp_path_factory.mktemp("simulated") / "run")


@pytest.fixture
def record(original, tmp_path):
    return copied(original, tmp_path / "in")


def take(site, tmp_path):
    """Everything that intake and loading hold, and the series that are left."""
    taken = intake.gather([tmp_path / "in"], site, known=())
    loaded = [intake.load(session, RECIPE) for session in taken.sessions]
    held = [*taken.held, *(one for each in loaded for one in each.held)]
    used = sum(len(session.files) for session in taken.sessions)
    assert taken.seen == used + taken.duplicates + len(taken.held)
    return held, [series for each in loaded for series in each.series]


def only(held, path, code):
    """The one held file is this one, for this reason, said in words."""
    assert [(one.path, one.code) for one in held] == [(str(path), code)]
    reason = held[0].reason
    assert len(reason.split()) >= 5
    assert "\x00" not in reason
    return reason


BROKEN = {
    "empty": (lambda content: b"", "not-dicom"),
    "text": (lambda content: b"weekly scan, all well\n" * 30, "not-dicom"),
    "random": (lambda content: np.random.default_rng(1).bytes(5000), "not-dicom"),
    "preamble only": (lambda content: content[:132], "not-mr-image"),
    "cut in the header": (lambda content: content[:600], "no-identity"),
    "cut in the pixels": (lambda content: content[:-200], "truncated"),
    "cut before the pixels": (lambda content: content[: -48 * 48 * 2 - 12], "no-pixels"),
    "half": (lambda content: content[: len(content) // 2], "truncated"),
}


@pytest.mark.parametrize("case", BROKEN)
def test_broken_bytes(site, record, tmp_path, case):
    breaks, code = BROKEN[case]
    path = record.files[2]
    path.write_bytes(breaks(path.read_bytes()))
    held, series = take(site, tmp_path)
    only(held, path, code)
    assert [one.frames.shape[0] for one in series] == [4, 6]


def sequence_of(depth):
    inner = Dataset()
    inner.PatientID = "deep"
    for _ in range(depth):
        outer = Dataset()
        outer.RequestAttributesSequence = Sequence([inner])
        inner = outer
    return inner.RequestAttributesSequence


CHANGES = {
    "another modality": ({"Modality": "CT"}, "not-mr-image", "CT"),
    "another class": ({"SOPClassUID": "1.2.840.10008.5.1.4.1.1.7"}, "not-mr-image", "Secondary Capture"),
    "no class": ({"SOPClassUID": None}, "not-mr-image", "not stated"),
    "spectroscopy": ({"SOPClassUID": "1.2.840.10008.5.1.4.1.1.4.2"}, "not-mr-image", "MR Spectroscopy"),
    "no instance UID": ({"SOPInstanceUID": ""}, "no-identity", "UID"),
    "no study UID": ({"StudyInstanceUID": None}, "no-identity", "UID"),
    "no series UID": ({"SeriesInstanceUID": None}, "no-identity", "UID"),
    "no date": (
        {f"{k}Date": None for k in ("Acquisition", "Series", "Study", "Content")},
        "no-date",
        "when it was acquired",
    ),
    "colour": ({"SamplesPerPixel": 3}, "not-grey", "3 samples"),
    "no rows": ({"Rows": None}, "no-pixels", "matrix"),
    "rows of zero": ({"Rows": 0}, "no-pixels", "matrix"),
    "no pixels": ({"PixelData": None}, "no-pixels", "pixel data"),
    "more rows than there are": ({"Rows": 60000, "Columns": 60000}, "too-large", "60000"),
    "more pixels than bytes": ({"Rows": 4000, "Columns": 4000}, "truncated", "32000000 are needed"),
    "odd bits": ({"BitsAllocated": 12}, "damaged", "12"),
    "one bit": ({"BitsAllocated": 1}, "damaged", "1"),
    "frames in a classic file": ({"NumberOfFrames": 3}, "damaged", "functional groups"),
    "absurd frames": ({"NumberOfFrames": 2147483647}, "damaged", "frames"),
    "negative frames": ({"NumberOfFrames": -3}, "damaged", "frames"),
    "no pixel spacing": ({"PixelSpacing": None}, "no-geometry", "PixelSpacing"),
    "pixel spacing of zero": ({"PixelSpacing": [0, 0]}, "no-geometry", "PixelSpacing"),
    "one pixel spacing": ({"PixelSpacing": "3"}, "no-geometry", "PixelSpacing"),
    "no inversion time": ({"InversionTime": None}, "missing-timing", "InversionTime for scan 'T1 IR'"),
    "empty inversion time": ({"InversionTime": ""}, "missing-timing", "InversionTime"),
    "negative inversion time": ({"InversionTime": -5}, "missing-timing", "InversionTime"),
    "another matrix": ({"Rows": 24, "Columns": 48}, "mixed-matrix", "24 x 48"),
    "another pixel size": ({"PixelSpacing": [2, 2]}, "mixed-matrix", "2 mm"),
    "tilted": ({"ImageOrientationPatient": [1, 0, 0, 0, 0.8, 0.6]}, "mixed-matrix", "orientation"),
    "a slope beyond numbers": ({"RescaleSlope": "1e300", "RescaleIntercept": 0}, "damaged", "slope"),
}


@pytest.mark.parametrize("case", CHANGES)
def test_headers_that_cannot_be_used(site, record, tmp_path, case):
    values, code, said = CHANGES[case]
    path = edit(record.files[2], **values)
    held, series = take(site, tmp_path)
    assert said in only(held, path, code)
    assert held[0].sha256
    assert [one.frames.shape[0] for one in series] == [4, 6]


def test_no_echo_time(site, record, tmp_path):
    path = edit(record.files[-1], EchoTime=None)
    held, series = take(site, tmp_path)
    assert "no EchoTime for scan 'T2 train'" in only(held, path, "missing-timing")
    assert [one.frames.shape[0] for one in series] == [5, 5]


def test_enhanced_frames_without_times_hold_the_file(site, tmp_path):
    path = run(tmp_path / "in", "enhanced").files[0]
    dataset = pydicom.dcmread(path)
    del dataset.PerFrameFunctionalGroupsSequence[3].MRModifierSequence
    dataset.save_as(path)
    held, series = take(site, tmp_path)
    only(held, path, "missing-timing")
    assert "T2 train" in {one.scan.name for one in series}


def test_enhanced_frames_that_are_claimed_but_not_there(site, tmp_path):
    path = edit(run(tmp_path / "in", "enhanced").files[0], NumberOfFrames=90_000)
    held, _ = take(site, tmp_path)
    only(held, path, "truncated")


def test_deep_nesting_is_borne(site, record, tmp_path):
    dataset = pydicom.dcmread(record.files[0])
    dataset.RequestAttributesSequence = sequence_of(60)
    dataset.save_as(record.files[0])
    held, series = take(site, tmp_path)
    assert held == []
    assert [one.frames.shape[0] for one in series] == [5, 6]


def test_nesting_beyond_reason_is_held(site, record, tmp_path):
    """20000 sequences of undefined length one in the other, as bytes: more than any reader's stack."""
    content = record.files[0].read_bytes()
    opening = b"\x40\x00\x75\x02SQ\0\0\xff\xff\xff\xff" + b"\xfe\xff\x00\xe0\xff\xff\xff\xff"
    at = content.index(b"\xe0\x7f\x10\x00")
    record.files[0].write_bytes(content[:at] + opening * 20000 + content[at:])
    held, series = take(site, tmp_path)
    assert [one.path for one in held] == [str(record.files[0])]
    assert [one.frames.shape[0] for one in series] == [4, 6]


def test_same_uid_other_content(site, record, tmp_path):
    copy = tmp_path / "in" / "later" / "copy.dcm"
    copy.parent.mkdir()
    dataset = pydicom.dcmread(record.files[0])
    change(dataset, PixelData=dataset.PixelData[:-2] + b"\x07\x00")
    dataset.save_as(copy)
    held, series = take(site, tmp_path)
    reason = only(held, copy, "same-uid-other-content")
    assert "altered" in reason
    assert [one.frames.shape[0] for one in series] == [5, 6]


def test_a_latecomer_with_a_known_uid_and_other_content_is_held(site, record, tmp_path):
    (first,) = intake.gather([tmp_path / "in"], site, known=()).sessions
    late = tmp_path / "late.dcm"
    dataset = pydicom.dcmread(record.files[0])
    change(dataset, PixelData=dataset.PixelData[:-2] + b"\x07\x00")
    dataset.save_as(late)
    (session,) = intake.gather([late], site, known={file.sha256 for file in first.files}).sessions
    whole = intake.merge(session, first.files, site)
    assert [(one.path, one.code) for one in whole.held] == [(str(late), "same-uid-other-content")]
    assert {file.sha256 for file in whole.files} == {file.sha256 for file in first.files}


def test_a_compressed_file_that_claims_too_much_is_not_decoded(site, record, tmp_path):
    from pydicom.encaps import encapsulate
    from pydicom.uid import RLELossless

    dataset = pydicom.dcmread(record.files[0])
    dataset.file_meta.TransferSyntaxUID = RLELossless
    dataset.PixelData = encapsulate([b"\0" * 300])
    dataset["PixelData"].is_undefined_length = True
    change(dataset, Rows=4000, Columns=4000)
    dataset.save_as(record.files[0])
    held, _ = take(site, tmp_path)
    assert "out of" in only(held, record.files[0], "too-large")


def test_a_deflated_file_that_grows_beyond_reason_is_not_inflated(site, record, tmp_path):
    """64 MiB of zeros in 64 KiB."""
    dataset = pydicom.dcmread(record.files[0])
    dataset.file_meta.TransferSyntaxUID = DeflatedExplicitVRLittleEndian
    dataset.save_as(record.files[0])
    content = record.files[0].read_bytes()
    start = 144 + int.from_bytes(content[140:144], "little")
    inner = zlib.decompress(content[start:], -zlib.MAX_WBITS)
    packer = zlib.compressobj(9, zlib.DEFLATED, -zlib.MAX_WBITS)
    bomb = packer.compress(inner + b"\x09\x00\x10\x00LO\x04\x00QA  " + b"\0" * (1 << 26)) + packer.flush()
    record.files[0].write_bytes(content[:start] + bomb)
    held, _ = take(site, tmp_path)
    assert "inflate" in only(held, record.files[0], "too-large")


def test_no_decoder_is_named_with_what_to_do(site, record, tmp_path):
    """JPIP refers to pixels that are elsewhere: no decoder exists."""
    dataset = pydicom.dcmread(record.files[0])
    from pydicom.encaps import encapsulate

    dataset.file_meta.TransferSyntaxUID = "1.2.840.10008.1.2.4.94"
    dataset.PixelData = encapsulate([b"\x01\x02" * 2000])
    dataset["PixelData"].is_undefined_length = True
    dataset.save_as(record.files[0])
    held, series = take(site, tmp_path)
    reason = only(held, record.files[0], "undecodable")
    assert "JPIP" in reason
    assert "Export it uncompressed" in reason
    assert [one.frames.shape[0] for one in series] == [4, 6]


def test_compressed_rubbish_is_held(site, record, tmp_path):
    from pydicom.encaps import encapsulate
    from pydicom.uid import JPEG2000Lossless, RLELossless

    for path, syntax in zip(record.files, (JPEG2000Lossless, RLELossless), strict=False):
        dataset = pydicom.dcmread(path)
        dataset.file_meta.TransferSyntaxUID = syntax
        dataset.PixelData = encapsulate([np.random.default_rng(3).bytes(4000)])
        dataset["PixelData"].is_undefined_length = True
        dataset.save_as(path)
    held, series = take(site, tmp_path)
    assert {one.code for one in held} == {"undecodable"}
    assert len(held) == 2
    assert [one.frames.shape[0] for one in series] == [3, 6]


@pytest.fixture
def as_nobody():
    """A folder that all may enter, and a test that runs without root's rights."""
    folder = Path(tempfile.mkdtemp())
    folder.chmod(0o755)
    yield folder
    if os.getuid() == 0:
        os.seteuid(0)
    shutil.rmtree(folder)


def test_a_file_without_permission_is_held(site, record, as_nobody):
    for name, mode, path in (("open", 0o644, record.files[0]), ("shut", 0o000, record.files[1])):
        shutil.copy(path, as_nobody / name)
        (as_nobody / name).chmod(mode)
    taking = _Taking(site, ())
    if os.getuid() == 0:
        os.seteuid(65534)
    assert (as_nobody / "open").read_bytes()
    taking.take(as_nobody / "shut")
    assert [(held.path, held.code) for held in taking.held] == [(str(as_nobody / "shut"), "unreadable")]
    assert "Permission denied" in taking.held[0].reason


def test_every_code_has_a_meaning_and_reads_as_a_sentence():
    for code, (meaning, remedy) in CODES.items():
        held = hold("x.dcm", code, "a detail", "ab" * 32)
        assert held.reason.startswith(f"{meaning}: a detail")
        assert remedy == "" or held.reason.endswith(remedy)
        assert remedy == "" or remedy.endswith(".")


def test_all_forms_hold_alike(tmp_path):
    """A file of another scanner in each form is one held file, whatever the number of its frames."""
    site = make_site(tmp_path / "site")
    for form, files in FILES.items():
        run(tmp_path / "in" / form, form, scanner="East")
        held = intake.gather([tmp_path / "in" / form], site, known=()).held
        assert len(held) == files
