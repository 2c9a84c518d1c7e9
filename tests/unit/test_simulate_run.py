"""Simulated runs as files: the same bytes for the same truth, and every value where a reader looks for it."""

import json
from dataclasses import replace

import numpy as np
import pydicom
import pytest
from intake_site import FILES, IR, PLATE, RECIPE, TE_MS, TI_MS, run, truth
from numpy.testing import assert_allclose

from qa.errors import SiteError, VialbookError
from qa.simulate import simulate_run
from qa.simulate.header import COUNTS
from qa.simulate.scene import images, lay
from qa.site import Recipe, Scan

FORMS = ["classic", "one-series", "enhanced"]


def read(record):
    return [pydicom.dcmread(path) for path in record.files]


def scan_of(files, name):
    return [ds for ds in files if ("IR" in ds.SeriesDescription) == (name == "T1 IR")]


@pytest.mark.parametrize("form", FORMS)
def test_same_arguments_same_bytes_and_another_seed_another_study(tmp_path, form):
    one, two = run(tmp_path / "a", form), run(tmp_path / "b", form)
    assert [p.read_bytes() for p in one.files] == [p.read_bytes() for p in two.files]
    other = run(tmp_path / "c", form, seed=6)
    assert other.study_uid != one.study_uid
    assert len(one.files) == FILES[form]


@pytest.mark.parametrize(("form", "series"), [("classic", len(TI_MS) + 1), ("one-series", 2), ("enhanced", 2)])
def test_series_and_instances(tmp_path, form, series):
    files = read(run(tmp_path / "run", form))
    assert len({ds.SeriesInstanceUID for ds in files}) == series
    assert len({ds.SOPInstanceUID for ds in files}) == len(files)
    assert {ds.StudyInstanceUID for ds in files} == {files[0].StudyInstanceUID}
    assert len({(ds.SeriesInstanceUID, ds.InstanceNumber) for ds in files}) == len(files)


@pytest.mark.parametrize("form", ["classic", "one-series"])
def test_classic_times(tmp_path, form):
    files = read(run(tmp_path / "run", form, inversion_te_ms=13.0))
    recovery, train = scan_of(files, "T1 IR"), scan_of(files, "T2 train")
    assert [float(ds.InversionTime) for ds in recovery] == list(TI_MS)
    assert {float(ds.EchoTime) for ds in recovery} == {13.0}
    assert {float(ds.RepetitionTime) for ds in recovery} == {5000.0}
    assert [float(ds.EchoTime) for ds in train] == list(TE_MS)
    assert all("InversionTime" not in ds for ds in train)


def test_enhanced_times(tmp_path):
    recovery, train = read(run(tmp_path / "run", "enhanced"))
    frames = recovery.PerFrameFunctionalGroupsSequence
    assert [frame.MRModifierSequence[0].InversionTimes for frame in frames] == list(TI_MS)
    assert recovery.NumberOfFrames == len(TI_MS)
    frames = train.PerFrameFunctionalGroupsSequence
    assert [frame.MREchoSequence[0].EffectiveEchoTime for frame in frames] == list(TE_MS)
    assert all("InversionTimes" not in frame.MRModifierSequence[0] for frame in frames)
    timing = train.SharedFunctionalGroupsSequence[0].MRTimingAndRelatedParametersSequence[0]
    assert float(timing.RepetitionTime) == 3000.0


@pytest.mark.parametrize("form", FORMS)
def test_pixels_are_the_simulated_image_in_counts(tmp_path, form):
    record = run(tmp_path / "run", form)
    frames = np.abs(images(IR, record.truth, PLATE, lay(PLATE, record.truth), np.random.default_rng(5)))
    stored = np.concatenate([np.atleast_3d(ds.pixel_array.T).T for ds in scan_of(read(record), "T1 IR")])
    assert_allclose(stored, frames * COUNTS, atol=0.501)  # rounded to whole counts


def scaled(ds):
    return ds.pixel_array * float(ds.get("RescaleSlope", 1))


def test_a_slope_per_frame_stretches_each_frame_and_tells_it(tmp_path):
    plain = scan_of(read(run(tmp_path / "a")), "T1 IR")
    sloped = scan_of(read(run(tmp_path / "b", scaling="slope-per-frame")), "T1 IR")
    assert len({float(ds.RescaleSlope) for ds in sloped}) == len(TI_MS)
    for one, other in zip(plain, sloped, strict=True):
        assert 29990 <= other.pixel_array.max() <= 30001
        assert_allclose(scaled(other), one.pixel_array, atol=0.51 + 0.5 * float(other.RescaleSlope))


def test_a_slope_per_frame_in_functional_groups(tmp_path):
    recovery, _ = read(run(tmp_path / "run", "enhanced", scaling="slope-per-frame"))
    assert "PixelValueTransformationSequence" not in recovery.SharedFunctionalGroupsSequence[0]
    slopes = [
        float(frame.PixelValueTransformationSequence[0].RescaleSlope)
        for frame in recovery.PerFrameFunctionalGroupsSequence
    ]
    assert len(set(slopes)) == len(TI_MS)
    plain, _ = read(run(tmp_path / "plain", "enhanced"))
    assert_allclose(recovery.pixel_array * np.array(slopes)[:, None, None], plain.pixel_array, atol=1.1)


def test_a_private_slope_undoes_what_the_public_one_does_not_tell(tmp_path):
    plain = scan_of(read(run(tmp_path / "a")), "T1 IR")
    private = scan_of(
        read(run(tmp_path / "b", scaling="private-slope", private_creator="INVENTED MR IMAGING DD 001")), "T1 IR"
    )
    public = [scaled(ds) for ds in private]
    assert not np.allclose(public[1] / public[1].max(), plain[1].pixel_array / plain[1].pixel_array.max() * 1.1)
    for one, other in zip(plain, private, strict=True):
        block = other.private_block(0x2005, "INVENTED MR IMAGING DD 001")
        # Chenevert et al. (2014), Transl. Oncol. 7, 65-71: (stored * RS + RI) / (RS * SS) compares between images.
        true = scaled(other) / (float(other.RescaleSlope) * block[0x0E].value)
        assert_allclose(true, one.pixel_array, atol=1.1, rtol=1e-6)


def test_signed_and_complex_data(tmp_path):
    magnitude = scan_of(read(run(tmp_path / "m")), "T1 IR")
    real = scan_of(read(run(tmp_path / "r", written="real")), "T1 IR")
    assert real[0].PixelRepresentation == 1
    assert real[0].pixel_array.min() < -1000  # inverted magnetisation at the shortest TI
    assert real[0].ImageType[2] == "R"
    both = scan_of(read(run(tmp_path / "c", written="real-imaginary")), "T1 IR")
    assert len(both) == 2 * len(magnitude)
    parts = {part: [ds for ds in both if ds.ImageType[2] == part] for part in "RI"}
    for whole, re, im in zip(magnitude, parts["R"], parts["I"], strict=True):
        assert_allclose(np.hypot(re.pixel_array * 1.0, im.pixel_array), whole.pixel_array, atol=1.3)


@pytest.mark.parametrize("form", FORMS)
def test_attributes_left_out_are_nowhere(tmp_path, form):
    record = run(tmp_path / "run", form, left_out=("RepetitionTime", "MagneticFieldStrength"))
    for ds in read(record):
        assert "RepetitionTime" not in str(ds)
        assert not [e for e in ds.iterall() if e.keyword in ("RepetitionTime", "MagneticFieldStrength")]


def test_what_was_not_scanned_is_not_written(tmp_path):
    files = read(run(tmp_path / "a", omitted=("T2 train",), skipped={"T1 IR": (200.0,)}, tr_ms={"T1 IR": 1500.0}))
    assert [float(ds.InversionTime) for ds in files] == [t for t in TI_MS if t != 200.0]
    assert {float(ds.RepetitionTime) for ds in files} == {1500.0}


def test_saturation_recovery_and_separate_echoes_are_written(tmp_path):
    scans = (
        Scan(name="SR", quantity="T1", method="saturation-recovery", match={"SeriesDescription": "SR"}, ti_ms=TI_MS),
        Scan(name="SE", quantity="T2", method="spin-echo-multi-te", match={"SeriesDescription": "SE"}, te_ms=TE_MS),
    )
    record = run(tmp_path / "run", recipe=Recipe(name="other", scans=scans))
    files = read(record)
    assert [float(ds.InversionTime) for ds in files[: len(TI_MS)]] == list(TI_MS)
    assert [float(ds.EchoTime) for ds in files[len(TI_MS) :]] == list(TE_MS)
    assert {ds.SeriesDescription for ds in files} == {"SR", "SE"}
    row, column = round(record.vials[3].row), round(record.vials[3].column)
    growing = [int(ds.pixel_array[row, column]) for ds in files[: len(TI_MS)]]
    assert growing == sorted(growing)
    assert growing[-1] > 4 * growing[0] > 0


def test_the_record_is_written_beside_the_run(tmp_path):
    simulate_run(PLATE, RECIPE, truth(), tmp_path / "run", seed=1, write_truth=True)
    record = json.loads((tmp_path / "run.truth.json").read_text())
    assert [vial["label"] for vial in record["vials"]] == [vial.label for vial in PLATE.vials]
    assert record["truth"]["acquired"] == "2026-03-02T07:30:00+00:00"
    assert len(record["files"]) == FILES["classic"]
    assert all((tmp_path / "run" / name).is_file() for name in record["files"])


def test_errors_say_what_is_wrong(tmp_path):
    short = replace(truth(), vials=truth().vials[:-2])
    with pytest.raises(VialbookError, match="nothing of vial 5, 6"):
        simulate_run(PLATE, RECIPE, short, tmp_path / "run", seed=1)
    with pytest.raises(SiteError, match="'Serial' is not a DICOM keyword"):
        run(tmp_path / "run", facts={"Serial": "1"})
    (tmp_path / "file").write_text("")
    with pytest.raises(VialbookError, match="cannot write a simulated run"):
        run(tmp_path / "file" / "run")


def test_scan_names_reach_series_descriptions_that_the_recipe_matches(tmp_path):
    descriptions = [str(ds.SeriesDescription) for ds in read(run(tmp_path / "run"))]
    assert descriptions[0].startswith("QA IR")
    assert all(text.startswith("QA ME") for text in descriptions[len(TI_MS) :])
