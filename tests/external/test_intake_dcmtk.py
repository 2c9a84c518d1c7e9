"""Files rewritten by DCMTK in other transfer syntaxes: the same pixel values, or held with what to install."""

import subprocess

import pytest
from intake_site import RECIPE, copied, make_site, run
from numpy.testing import assert_array_equal
from pydicom.pixels import get_decoder
from pydicom.uid import JPEGLosslessSV1, JPEGLSLossless

from qa import intake

pytestmark = pytest.mark.dicom_tools

LOSSLESS = {
    "implicit": ["dcmconv", "+ti"],
    "big endian": ["dcmconv", "+tb"],
    "deflated": ["dcmconv", "+td"],
    "explicit, undefined lengths": ["dcmconv", "+te", "-e"],
    "without meta header": ["dcmconv", "-F"],
    "RLE": ["dcmcrle"],
}
NEEDS_DECODER = {
    "JPEG lossless": (["dcmcjpeg", "+e1"], JPEGLosslessSV1),
    "JPEG-LS": (["dcmcjpls"], JPEGLSLossless),
}


@pytest.fixture(scope="module")
def originals(tmp_path_factory):
    folder = tmp_path_factory.mktemp("simulated")
    return {
        "classic": run(folder / "classic"),
        "enhanced": run(folder / "enhanced", "enhanced"),
        "signed": run(folder / "signed", written="real"),
    }


def loaded(site, folder):
    taken = intake.gather([folder], site, known=())
    assert taken.held == ()
    (session,) = taken.sessions
    return session, intake.load(session, RECIPE)


def rewritten(record, folder, command):
    copy = copied(record, folder)
    for path in copy.files:
        subprocess.run([*command, str(path), str(path)], check=True, capture_output=True)
    return copy


@pytest.mark.parametrize("case", LOSSLESS)
@pytest.mark.parametrize("kind", ["classic", "enhanced", "signed"])
def test_every_rewriting_gives_the_same_series(originals, tmp_path, kind, case):
    site = make_site(tmp_path / "site")
    _, want = loaded(site, originals[kind].folder)
    rewritten(originals[kind], tmp_path / "in", LOSSLESS[case])
    session, got = loaded(site, tmp_path / "in")
    assert got.held == ()
    assert session.remarks == ()
    for one, other in zip(got.series, want.series, strict=True):
        assert_array_equal(one.frames, other.frames)
        assert_array_equal(one.ti_ms, other.ti_ms)
        assert_array_equal(one.te_ms, other.te_ms)
        assert one.signed == other.signed


@pytest.mark.parametrize("case", NEEDS_DECODER)
def test_syntaxes_that_need_a_decoder(originals, tmp_path, case):
    """With the decoder installed the same values; else every file is held, and the reason says what to install."""
    command, syntax = NEEDS_DECODER[case]
    site = make_site(tmp_path / "site")
    _, want = loaded(site, originals["classic"].folder)
    copy = rewritten(originals["classic"], tmp_path / "in", command)
    _, got = loaded(site, tmp_path / "in")
    if get_decoder(syntax).is_available:
        assert got.held == ()
        for one, other in zip(got.series, want.series, strict=True):
            assert_array_equal(one.frames, other.frames)
    else:
        assert {held.path for held in got.held} == {str(path) for path in copy.files}
        assert {held.code for held in got.held} == {"undecodable"}
        assert "pip install pylibjpeg pylibjpeg-libjpeg" in got.held[0].reason
        assert syntax.name in got.held[0].reason


def test_lossy_jpeg_is_used_and_remarked(originals, tmp_path):
    rewritten(originals["classic"], tmp_path / "in", ["dcmcjpeg", "+ee", "--bits-force-12"])
    session, got = loaded(make_site(tmp_path / "site"), tmp_path / "in")
    assert [remark.code for remark in session.remarks] == ["lossy-compression"]
    assert len(got.held) in (0, len(session.files))  # 12-bit JPEG: not every build of Pillow decodes it
    assert {held.code for held in got.held} <= {"undecodable"}
