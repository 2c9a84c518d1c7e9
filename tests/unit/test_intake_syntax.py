"""Transfer syntaxes: the same values whatever the encoding."""

import numpy as np
import pydicom
import pytest
from intake_site import RECIPE, copied, make_site, run
from numpy.testing import assert_array_equal
from pydicom.uid import (
    DeflatedExplicitVRLittleEndian,
    ExplicitVRBigEndian,
    ExplicitVRLittleEndian,
    ImplicitVRLittleEndian,
    RLELossless,
)

from qa import intake
from qa.intake.reader import looks_like_dicom

SYNTAXES = [
    ImplicitVRLittleEndian,
    ExplicitVRLittleEndian,
    ExplicitVRBigEndian,
    DeflatedExplicitVRLittleEndian,
    RLELossless,
]


@pytest.fixture(scope="module")
def originals(tmp_path_factory):
    return {form: run(tmp_path_factory.mktemp(form) / "run", form) for form in ("classic", "enhanced")}


def loaded(site, folder):
    taken = intake.gather([folder], site, known=())
    assert taken.held == ()
    (session,) = taken.sessions
    got = intake.load(session, RECIPE)
    assert (got.held, got.remarks) == ((), ())
    return got.series


def rewrite(path, syntax):
    dataset = pydicom.dcmread(path)
    if syntax == RLELossless:
        dataset.compress(RLELossless, generate_instance_uid=False)
        dataset.save_as(path)
    elif syntax == ExplicitVRBigEndian:
        swapped = dataset.pixel_array.astype(dataset.pixel_array.dtype.newbyteorder(">"))
        dataset.PixelData = swapped.tobytes()
        dataset.file_meta.TransferSyntaxUID = syntax
        pydicom.dcmwrite(path, dataset, implicit_vr=False, little_endian=False)
    else:
        dataset.file_meta.TransferSyntaxUID = syntax
        dataset["PixelData"].VR = "OW"
        pydicom.dcmwrite(path, dataset, implicit_vr=syntax == ImplicitVRLittleEndian, little_endian=True)


@pytest.mark.parametrize("syntax", SYNTAXES, ids=lambda syntax: syntax.name.replace(" ", "-"))
@pytest.mark.parametrize("form", ["classic", "enhanced"])
def test_every_syntax_gives_the_same_frames_and_times(originals, tmp_path, form, syntax):
    site = make_site(tmp_path / "site")
    want = loaded(site, originals[form].folder)
    for path in copied(originals[form], tmp_path / "in").files:
        rewrite(path, syntax)
        assert pydicom.dcmread(path).file_meta.TransferSyntaxUID == syntax
    for one, other in zip(loaded(site, tmp_path / "in"), want, strict=True):
        assert_array_equal(one.frames, other.frames)
        assert_array_equal(one.ti_ms, other.ti_ms)
        assert_array_equal(one.te_ms, other.te_ms)
        assert one.facts == other.facts


def test_rle_of_signed_pixels(tmp_path):
    record = run(tmp_path / "in", written="real")
    stored = pydicom.dcmread(record.files[0]).pixel_array
    for path in record.files:
        rewrite(path, RLELossless)
    series = loaded(make_site(tmp_path / "site"), tmp_path / "in")
    assert_array_equal(series[0].frames[0], stored)
    assert series[0].frames.min() < 0


@pytest.mark.parametrize("keep", ["preamble", "meta", "nothing"])
def test_files_without_preamble_or_meta_are_read(originals, tmp_path, keep):
    """Old exports are bare datasets, explicit or implicit; PS3.10 wants more, but the content is all there."""
    record = copied(originals["classic"], tmp_path / "in")
    for path in record.files:
        if keep == "preamble":
            path.write_bytes(bytes(range(128)) + path.read_bytes()[128:])
        elif keep == "meta":
            path.write_bytes(path.read_bytes()[132:])
        else:
            dataset = pydicom.dcmread(path)
            del dataset.file_meta
            dataset.preamble = None
            dataset["PixelData"].VR = "OW"
            pydicom.dcmwrite(path, dataset, implicit_vr=True, little_endian=True, enforce_file_format=False)
    series = loaded(make_site(tmp_path / "site"), tmp_path / "in")
    assert [len(one.frames) for one in series] == [5, 6]


def test_lossy_compression_is_remarked(originals, tmp_path):
    record = copied(originals["classic"], tmp_path / "in")
    dataset = pydicom.dcmread(record.files[3])
    dataset.LossyImageCompression = "01"
    dataset.save_as(record.files[3])
    (session,) = intake.gather([tmp_path / "in"], make_site(tmp_path / "site"), known=()).sessions
    assert [(remark.code, remark.consequence.value) for remark in session.remarks] == [("lossy-compression", "watch")]


@pytest.mark.parametrize(
    ("head", "is_one"),
    [
        (b"\0" * 128 + b"DICM", True),
        (b"\x02\x00\x00\x00UL\x04\x00", True),
        (b"\x08\x00\x05\x00CS\x0a\x00", True),
        (b"\x08\x00\x08\x00\x16\x00\x00\x00", True),
        (b"", False),
        (b"\x08\x00", False),
        (b"\x08\x00\x08\x00\x16\x00\x00\x7f", False),
        (b"PK\x03\x04" + b"\0" * 128, False),
        (b"\x89PNG\r\n\x1a\n" + b"\0" * 124, False),
        (b"%PDF-1.7" + b" " * 124, False),
    ],
)
def test_what_looks_like_dicom(head, is_one):
    assert looks_like_dicom(head) is is_one


def test_values_are_those_of_pydicom(originals):
    """The frames of the untouched run are pydicom's pixel values themselves: no scale is stated in them."""
    stored = np.stack([pydicom.dcmread(path).pixel_array for path in originals["classic"].files])
    enhanced = np.concatenate([pydicom.dcmread(path).pixel_array for path in originals["enhanced"].files])
    assert stored.shape == enhanced.shape
    assert stored.dtype == np.uint16
