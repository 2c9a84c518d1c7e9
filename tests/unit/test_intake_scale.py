"""Pixels on one scale: rescale, real-world mapping and the private scale slope, of classic and enhanced files."""

import numpy as np
import pydicom
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from intake_site import IR, RECIPE, TI_MS, change, edit, make_site, run
from numpy.testing import assert_allclose
from pydicom.dataset import Dataset
from pydicom.sequence import Sequence

from qa import intake
from qa.intake.pixels import scale_of, scaled
from qa.site import Recipe
from qa.words import Consequence

CREATOR = "Invented MR Imaging DD 001"  # only the block's last words matter: owners write them in several ways


def loaded(tmp_path, recipe=RECIPE):
    site = make_site(tmp_path / "site")
    (session,) = intake.gather([tmp_path / "in"], site, known=()).sessions
    return intake.load(session, recipe)


def item(**values):
    dataset = Dataset()
    change(dataset, **values)
    return Sequence([dataset])


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    """The frames of the run in plain counts: every other way of scaling must give them again."""
    folder = tmp_path_factory.mktemp("plain")
    run(folder / "in")
    return [series.frames for series in loaded(folder).series]


@pytest.mark.parametrize("form", ["classic", "one-series", "enhanced"])
def test_a_rescale_slope_per_frame(tmp_path, plain, form):
    run(tmp_path / "in", form, scaling="slope-per-frame")
    for series, want in zip(loaded(tmp_path).series, plain, strict=True):
        # In units of one count of the plain run; stretching rounds less than that.
        assert_allclose(series.frames, want, atol=1.1)


@pytest.mark.parametrize("form", ["classic", "one-series"])
def test_the_private_scale_slope(tmp_path, plain, form):
    run(tmp_path / "in", form, scaling="private-slope", private_creator=CREATOR)
    for series, want in zip(loaded(tmp_path).series, plain, strict=True):
        assert_allclose(series.frames, want, atol=1.1)
        assert series.remarks == ()


def test_without_its_creator_the_private_slope_is_not_believed(tmp_path, plain):
    run(tmp_path / "in", scaling="private-slope", private_creator="SOMEBODY ELSE 01")
    recovery = loaded(tmp_path).series[0]
    assert not np.allclose(recovery.frames / recovery.frames.max(), plain[0] / plain[0].max(), atol=0.01)


def test_frames_with_and_without_a_private_scale_are_not_on_one_scale(tmp_path):
    record = run(tmp_path / "in", scaling="private-slope", private_creator=CREATOR)
    dataset = pydicom.dcmread(record.files[1])
    dataset.remove_private_tags()
    dataset.save_as(record.files[1])
    (remark,) = loaded(tmp_path).series[0].remarks
    assert (remark.code, remark.consequence, remark.subject) == ("mixed-scale", Consequence.VOID, "T1 IR")


def test_a_real_world_value_mapping_maps_stored_values(tmp_path, plain):
    """PS3.3 C.7.6.16.2.11: it is not applied after RescaleSlope; and without a rescale it is the scale."""
    record = run(tmp_path / "in")
    for k, path in enumerate(record.files):
        dataset = pydicom.dcmread(path)
        stored = np.clip(np.rint(dataset.pixel_array * (1.0 + k)), 0, 65535).astype("<u2")
        mapping = item(RealWorldValueSlope=1.0 / (1.0 + k), RealWorldValueIntercept=0.0)
        change(dataset, PixelData=stored.tobytes(), RealWorldValueMappingSequence=mapping)
        dataset.save_as(path)
    for series, want in zip(loaded(tmp_path).series, plain, strict=True):
        assert_allclose(series.frames, want, atol=1.1)


def test_a_real_world_value_mapping_per_frame(tmp_path, plain):
    record = run(tmp_path / "in", "enhanced", recipe=Recipe(name="one", scans=(IR,)))
    dataset = pydicom.dcmread(record.files[0])
    del dataset.SharedFunctionalGroupsSequence[0].PixelValueTransformationSequence
    factors = np.arange(1, len(TI_MS) + 1)
    for k, frame in enumerate(dataset.PerFrameFunctionalGroupsSequence):
        frame.RealWorldValueMappingSequence = item(
            RealWorldValueSlope=1.0 / float(factors[k]), RealWorldValueIntercept=0.0
        )
    stored = (dataset.pixel_array * factors[:, None, None]).astype("<u2")
    change(dataset, PixelData=stored.tobytes())
    dataset.save_as(record.files[0])
    assert_allclose(loaded(tmp_path, Recipe(name="one", scans=(IR,))).series[0].frames, plain[0], atol=0.001, rtol=1e-6)


def test_an_intercept_is_added(tmp_path, plain):
    for k, path in enumerate(run(tmp_path / "in").files):
        dataset = pydicom.dcmread(path)
        stored = (dataset.pixel_array + 100 * k).astype("<u2")
        change(dataset, PixelData=stored.tobytes(), RescaleSlope=1, RescaleIntercept=-100 * k)
        dataset.save_as(path)
    for series, want in zip(loaded(tmp_path).series, plain, strict=True):
        assert_allclose(series.frames, want, atol=1e-3)


def test_signed_pixels(tmp_path):
    path = run(tmp_path / "in", written="real").files[0]
    dataset = pydicom.dcmread(path)
    assert dataset.PixelRepresentation == 1
    assert_allclose(loaded(tmp_path).series[0].frames[0], dataset.pixel_array)


@pytest.mark.parametrize(("bits", "stored_bits"), [(8, 8), (16, 12), (32, 32)])
def test_bits(tmp_path, bits, stored_bits):
    record = run(tmp_path / "in", recipe=Recipe(name="one", scans=(IR,)))
    values = np.random.default_rng(1).integers(0, 2 ** min(stored_bits, 24), (48, 48))
    for path in record.files:
        edit(
            path,
            BitsAllocated=bits,
            BitsStored=stored_bits,
            HighBit=stored_bits - 1,
            PixelData=values.astype(f"<u{bits // 8}").tobytes(),
        )
    got = loaded(tmp_path, Recipe(name="one", scans=(IR,)))
    assert got.held == ()
    assert_allclose(got.series[0].frames[0], values)


def dataset_with(slope=None, intercept=None, private=None):
    dataset = Dataset()
    change(dataset, RescaleSlope=slope, RescaleIntercept=intercept)
    if private is not None:
        dataset.private_block(0x2005, CREATOR, create=True).add_new(0x0E, "FL", private)
    return dataset


def test_the_published_worked_values():
    # Formula: Chenevert et al. (2014), Transl. Oncol. 7, 65-71, doi 10.1593/tlo.13811. The numbers are from public
    # discussion threads that cite it: RS 1.53455, RI -3142, SS 651.74, PV 3000 give DV 1461.65 and FP 1.4614635.
    kind, slope, intercept = scale_of(dataset_with(1.53455, -3142, 651.74), 0)
    assert kind == "private"
    assert_allclose(3000 * slope + intercept, 1.4614635, rtol=1e-5)
    kind, slope, intercept = scale_of(dataset_with(1.53455, -3142), 0)
    assert kind == "rescale"
    assert_allclose(3000 * slope + intercept, 1461.65, rtol=1e-6)


def test_the_private_block_is_found_wherever_it_lies():
    dataset = dataset_with(2.0, 0)
    dataset.private_block(0x2005, "ANOTHER OWNER", create=True).add_new(0x0E, "FL", 99.0)
    dataset.private_block(0x2005, CREATOR, create=True).add_new(0x0E, "FL", 4.0)
    assert dataset[0x2005, 0x110E].value == 4.0  # second block: element 0x110E, not the literal 0x100E
    assert scale_of(dataset, 0) == ("private", 0.25, 0.0)


def test_no_scale_at_all():
    assert scale_of(Dataset(), 0) == ("stored", 1.0, 0.0)
    assert scale_of(dataset_with("", ""), 0) == ("stored", 1.0, 0.0)
    assert scale_of(dataset_with(0, 5), 0)[0] == "stored"  # a slope of zero says nothing


@settings(max_examples=60)
@given(
    stored=st.lists(st.integers(0, 4095), min_size=4, max_size=4),
    slope=st.floats(1e-3, 1e3),
    intercept=st.floats(-1e4, 1e4),
    private=st.floats(1e-3, 1e3),
)
def test_all_images_of_one_true_signal_agree_after_scaling(stored, slope, intercept, private):
    """Two images of the same floating-point values, written with different slopes, come out the same."""
    stored = np.array(stored)
    slope, intercept = float(f"{slope:.8g}"), float(f"{intercept:.8g}")  # what a DS holds
    private = float(np.float32(private))  # what an FL holds
    kind, factor, offset = scale_of(dataset_with(slope, intercept, private), 0)
    assert kind == "private"
    true = (stored + intercept / slope) / private
    assert_allclose(scaled(stored, factor, offset), true, rtol=2e-6, atol=1e-6 * np.abs(true).max() + 1e-12)
