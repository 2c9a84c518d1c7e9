"""Finding plates: any rotation, shift, mirror image, scale, shading, missing vials and bubbles; or refusing."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from plate_images import ASYMMETRIC, Scene, crescent, paint, plate_of, relaxation, still, terrace
from plate_negatives import NEGATIVES

from qa.locate import NotLocated, Placement, locate

TI_MS = np.array([35.0, 120.0, 300.0, 700.0, 1500.0, 2700.0])
TE_MS = np.arange(1, 7) * 24.0


def scene(plate, *, matrix=96, fov_mm=200.0, seed=0, water=False, lie=None, **more):
    """A plate with vials of T1 100 to 2000 ms, at noise of 2 % of a full signal."""
    vials = len(plate.vials)
    t1 = np.random.default_rng(seed).permutation(np.geomspace(100, 2000, vials))
    signals = np.abs(relaxation(t1, 0.15 * t1, TI_MS, TE_MS))
    around = np.abs(relaxation(np.array([2700.0]), np.array([1500.0]), TI_MS, TE_MS))[0] if water else None
    given = {"sigma": 0.02, "around": around, "container_mm": 0.47 * fov_mm} | more
    spacing = (fov_mm / matrix, fov_mm / matrix)
    return Scene(plate, lie or still((matrix, matrix)), (matrix, matrix), spacing, signals, **given)


def found_in(what, seed=1):
    frames = paint(what, np.random.default_rng(seed))
    return locate(frames, what.spacing_mm, what.plate)


def error_voxels(what, found):
    """Largest distance of a vial from its true place."""
    assert isinstance(found, Placement), found
    there = np.array(found.vial_centres(what.plate, what.spacing_mm))
    return np.hypot(*(there - np.array(what.placement.vial_centres(what.plate, what.spacing_mm)))).max()


@settings(max_examples=25)
@given(
    name=st.sampled_from(sorted(ASYMMETRIC)),
    rotation=st.floats(-180, 180),
    flipped=st.booleans(),
    scale=st.floats(0.98, 1.02),
    shift=st.tuples(st.floats(-8, 8), st.floats(-8, 8)),
    depth=st.floats(0, 0.6),
    water=st.booleans(),
    seed=st.integers(0, 10_000),
)
def test_any_placement_is_found_to_a_small_part_of_a_voxel(name, rotation, flipped, scale, shift, depth, water, seed):
    lie = still((96, 96), rotation, flipped, scale, shift)
    what = scene(ASYMMETRIC[name](), seed=seed, water=water, lie=lie, shading=(depth, 0.01 * seed, 0.1))
    found = found_in(what, seed)
    assert error_voxels(what, found) < 0.15
    assert found.flipped == flipped
    assert_allclose(found.scale, scale, atol=0.002)
    assert abs((found.rotation_deg - rotation + 180) % 360 - 180) < 0.2
    assert -180 < found.rotation_deg <= 180
    assert found.residual_mm < 0.25
    assert found.confidence > 0.5
    assert found.missing == ()


@settings(max_examples=12)
@given(
    name=st.sampled_from(sorted(ASYMMETRIC)),
    gone=st.sets(st.integers(0, 11), min_size=1, max_size=2),
    rotation=st.floats(-180, 180),
    seed=st.integers(0, 10_000),
)
def test_missing_vials_are_named_and_never_make_another_labelling(name, gone, rotation, seed):
    what = scene(ASYMMETRIC[name](), seed=seed, lie=still((96, 96), rotation), gone=tuple(gone))
    found = found_in(what, seed)
    assert error_voxels(what, found) < 0.25
    assert set(found.missing) == {what.plate.vials[k].label for k in gone}
    assert set(found.seen) | set(found.missing) == {vial.label for vial in what.plate.vials}


@pytest.mark.parametrize("radius_mm", [2.0, 3.5, 5.0])
@pytest.mark.parametrize("name", sorted(ASYMMETRIC))
def test_a_bubble_does_not_pull_the_plate(name, radius_mm):
    bubbles = ((2, 2.0, 2.0, radius_mm), (7, -3.0, 0.0, radius_mm))
    what = scene(ASYMMETRIC[name](), bubbles=bubbles, lie=still((96, 96), 33.0, True))
    assert error_voxels(what, found_in(what)) < 0.15


@pytest.mark.parametrize("matrix", [48, 64, 128, 256])
def test_coarse_and_fine_voxels(matrix):
    what = scene(terrace(), matrix=matrix, lie=still((matrix, matrix), -71.0, False, 1.01, (2.0, -1.5)))
    found = found_in(what)
    assert error_voxels(what, found) * 200.0 / matrix < 0.3  # mm


def test_oblong_voxels():
    what = scene(crescent(), lie=still((96, 128), 25.0))
    what = replace(what, shape=(96, 128), spacing_mm=(2.1, 1.55))
    assert error_voxels(what, found_in(what)) < 0.15


def test_rms_error_is_far_below_a_voxel():
    """Over 14 placements; what the noise alone allows is a few hundredths of a voxel."""
    rng = np.random.default_rng(4)
    errors = []
    for _ in range(14):
        lie = still(
            (96, 96), rng.uniform(-180, 180), rng.random() < 0.5, rng.uniform(0.985, 1.015), rng.uniform(-5, 5, 2)
        )
        what = scene(crescent(), seed=int(rng.integers(1000)), lie=lie, sigma=0.03)
        found = found_in(what, int(rng.integers(1000)))
        errors.append(error_voxels(what, found))
    assert np.sqrt(np.mean(np.square(errors))) < 0.06


def test_units_of_frames_do_not_matter():
    what = scene(crescent(), lie=still((96, 96), 12.0))
    frames = paint(what, np.random.default_rng(1))
    factors = np.geomspace(1e-3, 1e4, len(frames)).astype(np.float32)[:, None, None]
    one, other = (locate(f, what.spacing_mm, what.plate) for f in (frames, frames * factors))
    assert_allclose([one.centre_row, one.centre_column], [other.centre_row, other.centre_column], atol=0.02)
    assert_allclose(one.rotation_deg, other.rotation_deg, atol=0.1)


def test_inverted_contrast_and_signed_frames():
    what = scene(crescent(), water=True, lie=still((96, 96), 48.0))
    frames = paint(what, np.random.default_rng(1))
    for turned in (-frames, frames.max() - frames):
        assert error_voxels(what, locate(turned, what.spacing_mm, what.plate)) < 0.15


def test_values_that_are_no_numbers_are_borne():
    what = scene(crescent(), lie=still((96, 96), 48.0))
    frames = paint(what, np.random.default_rng(1))
    frames[0, 3:6, 4] = np.nan
    frames[1, 90, 90] = np.inf
    assert error_voxels(what, locate(frames, what.spacing_mm, what.plate)) < 0.15


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("name", sorted(NEGATIVES))
def test_what_cannot_be_told_is_refused(name, seed):
    case = NEGATIVES[name](np.random.default_rng([seed, 77]))
    found = locate(case.frames, case.spacing_mm, case.plate)
    assert isinstance(found, NotLocated)
    wanted = {"ambiguous"} if name.startswith("symmetric") else {"no-plate", "too-few-vials"}
    assert found.code in wanted
    assert len(found.reason.split()) > 5


def test_an_ambiguous_plate_says_how_it_looks_alike():
    case = NEGATIVES["symmetric"](np.random.default_rng(3))
    found = locate(case.frames, case.spacing_mm, case.plate)
    assert "turned by 180 degrees" in found.reason
    mirrored = plate_of("kite", [(60, 0), (20, 35), (20, -35), (-50, 20), (-50, -20), (0, 0)], 10.0)
    found = found_in(scene(mirrored))
    assert found.code == "ambiguous"
    assert "mirrored" in found.reason


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("rotation", [-130.0, 0.0, 50.0])
@pytest.mark.parametrize("flipped", [False, True])
def test_one_vial_off_the_symmetry_is_enough(flipped, rotation, seed):
    points = [(60, 0), (20, 35), (20, -35), (-50, 20), (-50, -20), (0, 0), (5, 62)]
    plate = plate_of("keyed kite", [(float(x), float(y)) for x, y in points], 10.0)
    what = scene(plate, seed=seed, lie=still((96, 96), rotation, flipped))
    found = found_in(what)
    assert error_voxels(what, found) < 0.15
    assert found.flipped == flipped


@pytest.mark.parametrize("fill", [0.0, 7.5, np.nan])
def test_frames_without_any_content(fill):
    found = locate(np.full((3, 64, 64), fill, dtype=np.float32), (3.0, 3.0), crescent())
    assert isinstance(found, NotLocated)
    assert found.code == "no-plate"


@pytest.mark.parametrize(
    ("shape", "spacing_mm", "said"),
    [
        ((2, 16, 16), (12.0, 12.0), "16 x 16"),
        ((2, 64, 64), (9.0, 9.0), "too coarse"),
        ((2, 64, 64), (1.0, 1.0), "field of view"),
        ((0, 64, 64), (3.0, 3.0), "64 x 64"),
    ],
)
def test_images_that_cannot_show_the_plate(shape, spacing_mm, said):
    found = locate(np.ones(shape, dtype=np.float32), spacing_mm, crescent())
    assert found.code == "image-too-small"
    assert said in found.reason


def test_same_images_same_answer():
    what = scene(terrace(), lie=still((96, 96), 100.0))
    assert found_in(what) == found_in(what)
