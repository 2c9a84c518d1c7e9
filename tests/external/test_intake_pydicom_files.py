"""The MR files that come with pydicom: each is used or held for a reason, and its values are pydicom's own."""

import warnings
from pathlib import Path

import numpy as np
import pydicom
import pytest
from intake_site import SCANNERS, make_site
from numpy.testing import assert_allclose
from pydicom.data import get_testdata_file

from qa import intake
from qa.intake.holds import CODES
from qa.intake.pixels import FOREIGN_BYTES
from qa.site import Recipe, Scan, load_site

FOLDER = Path(get_testdata_file("MR_small.dcm", download=False)).parent
ANY = Recipe(
    name="any",
    scans=(Scan(name="any", quantity="T2", method="spin-echo-multi-te", match={"SeriesInstanceUID": "."}),),
)


def is_mr(path):
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return pydicom.dcmread(path, stop_before_pixels=True, force=True).get("Modality") == "MR"
    except FOREIGN_BYTES:
        return False


ALL = sorted(path for path in FOLDER.rglob("*") if path.is_file())
MR = [path for path in ALL if is_mr(path)]
SMALL = sorted(FOLDER.glob("MR_small*.dcm"))


def site_for(folder, path):
    """A site that knows the scanner and the phantom that the file names, or leaves unnamed."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        dataset = pydicom.dcmread(path, stop_before_pixels=True, force=True)
    site = make_site(folder)
    text = (folder / "site.toml").read_text()
    text = text.replace(f'DeviceSerialNumber = "{SCANNERS["North"]}"', f'Manufacturer = "{dataset.Manufacturer}"')
    text = text.replace('PatientID = "QA-A"', f'PatientID = "{dataset.PatientID}"')
    (folder / "site.toml").write_text(text)
    scan = ANY.scans[0]
    (folder / "recipe.toml").write_text(
        f'[recipe]\nname = "any"\n[[scan]]\nname = "any"\nquantity = "T2"\nmethod = "{scan.method}"\n'
        'match = { SeriesInstanceUID = "." }\n'
    )
    assert site.folder == folder.resolve()
    return load_site(folder)


def taken_from(path, site):
    taken = intake.gather([path], site, known=())
    assert taken.seen == sum(len(s.files) for s in taken.sessions) + taken.duplicates + len(taken.held)
    loaded = [intake.load(session, ANY) for session in taken.sessions]
    held = [*taken.held, *(held for each in loaded for held in each.held)]
    return [series for each in loaded for series in each.series], held


def test_there_are_files():
    assert len(MR) >= 20
    assert len(SMALL) >= 6


@pytest.mark.parametrize("path", MR, ids=lambda path: str(path.relative_to(FOLDER)))
def test_every_mr_file_is_used_or_held(tmp_path, path):
    series, held = taken_from(path, site_for(tmp_path / "site", path))
    if held:
        assert [one.code for one in held] == [held[0].code]
        assert held[0].code in CODES
        assert len(held[0].reason.split()) > 5
    else:
        (one,) = series
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            dataset = pydicom.dcmread(path)
            stored = dataset.pixel_array
        slope, intercept = float(dataset.get("RescaleSlope") or 1), float(dataset.get("RescaleIntercept") or 0)
        assert_allclose(one.frames[0], stored * slope + intercept, rtol=1e-6, atol=1e-3)
        assert one.te_ms[0] == float(dataset.EchoTime)
        assert one.tr_ms[0] == float(dataset.RepetitionTime)


@pytest.mark.parametrize("path", SMALL, ids=lambda path: path.stem)
def test_every_encoding_of_one_image_gives_the_same_values(tmp_path, path):
    series, held = taken_from(path, site_for(tmp_path / "site", path))
    if "jpeg_ls" in path.stem and held:
        assert "pip install pylibjpeg pylibjpeg-libjpeg" in held[0].reason
        return
    assert held == []
    (one,) = series
    want = pydicom.dcmread(FOLDER / "MR_small.dcm").pixel_array
    assert one.signed == bool(np.mean(want < 0) > 0.01)
    assert_allclose(one.frames[0], want)


def test_the_truncated_file_is_held_as_such(tmp_path):
    path = FOLDER / "MR_truncated.dcm"
    _, held = taken_from(path, site_for(tmp_path / "site", path))
    assert [one.code for one in held] == ["truncated"]
    assert "8130 bytes" in held[0].reason


def test_all_files_of_the_package_at_once(tmp_path):
    """CT, ultrasound, waveforms, DICOMDIRs, text: whatever lies there, nothing is lost and nothing raised."""
    taken = intake.gather([FOLDER], make_site(tmp_path / "site"), known=())
    assert taken.seen == len({(path.stat().st_dev, path.stat().st_ino) for path in ALL})
    assert taken.seen == len(taken.held) + taken.duplicates
    assert {held.code for held in taken.held} <= set(CODES)
    assert sum(held.code == "not-mr-image" for held in taken.held) > 30
