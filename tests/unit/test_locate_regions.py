"""Regions of voxels: clear of walls and neighbours, without bubbles and artefacts, and honest about empty places."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from plate_images import crescent, paint, terrace, thicket
from test_locate_find import TE_MS, TI_MS, scene

from qa.locate import locate, regions


def measured(what, seed=1):
    """Frames, placement (the true one) and regions."""
    frames = paint(what, np.random.default_rng(seed))
    lie = replace(what.placement, seen=tuple(vial.label for vial in what.plate.vials))
    return frames, regions(lie, what.plate, frames, what.spacing_mm)


@settings(max_examples=15)
@given(
    rotation=st.floats(-180, 180),
    shift=st.tuples(st.floats(-5, 5), st.floats(-5, 5)),
    fov_mm=st.floats(185, 240),
    seed=st.integers(0, 9999),
)
def test_every_voxel_lies_whole_inside_its_vial_and_clear_of_the_wall(rotation, shift, fov_mm, seed):
    what = scene(thicket(), fov_mm=fov_mm, seed=seed)
    what = replace(what, placement=replace(what.placement, rotation_deg=rotation))
    what.placement = replace(
        what.placement,
        centre_row=what.placement.centre_row + shift[0],
        centre_column=what.placement.centre_column + shift[1],
    )
    _, found = measured(what, seed)
    rows, columns = what.placement.vial_centres(what.plate, what.spacing_mm)
    voxel = what.spacing_mm[0]
    taken = set()
    for vial, region, row, column in zip(what.plate.vials, found, rows, columns, strict=True):
        assert region.label == vial.label
        dy, dx = np.abs(region.rows - row) + 0.5, np.abs(region.columns - column) + 0.5
        assert np.all(np.hypot(dy, dx) * voxel <= vial.radius_mm)
        if vial.radius_mm > 4.3 * voxel:  # room for the full margin, wherever the centre lies between voxels
            assert vial.radius_mm - np.hypot(dy, dx).max() * voxel >= 1.5 * voxel
        assert len(region.rows) >= 1
        places = set(zip(region.rows.tolist(), region.columns.tolist(), strict=True))
        assert not places & taken
        taken |= places


@pytest.mark.parametrize(("water", "atol"), [(False, 0.01), (True, 0.03)])
def test_the_mean_over_a_region_is_the_vials_signal(water, atol):
    """Without noise. Of water all around (signal 1), ringing brings up to 3 % into a vial of this size at 1.6 mm."""
    what = scene(crescent(), matrix=128, water=water, sigma=0.0)
    frames, found = measured(what)
    for k, region in enumerate(found):
        mean = frames[:, region.rows, region.columns].mean(axis=1)
        assert_allclose(mean, what.vial_signals[k], atol=atol)


def test_the_margin_shrinks_where_voxels_are_coarse():
    counts = {}
    for matrix in (48, 64, 96, 128, 192):
        _, found = measured(scene(terrace(), matrix=matrix))
        counts[matrix] = min(len(region.rows) for region in found)
    assert counts[48] >= 3  # vials of less than two voxels' radius
    assert list(counts.values()) == sorted(counts.values())
    assert counts[192] > 60


def test_voxels_of_a_bubble_are_left_out_and_counted():
    plain = scene(crescent(), matrix=128)
    holed = replace(plain, bubbles=((3, 2.0, 1.0, 2.5),))
    _, whole = measured(plain)
    _, found = measured(holed)
    assert found[3].excluded >= 4
    left, there = len(found[3].rows), len(whole[3].rows) + whole[3].excluded
    assert left + found[3].excluded == there
    assert left >= there // 2
    rows, columns = holed.placement.vial_centres(holed.plate, holed.spacing_mm)
    y, x = rows[3] - 1.0 / holed.spacing_mm[0], columns[3] + 2.0 / holed.spacing_mm[1]
    apart = np.hypot(found[3].rows - y, found[3].columns - x) * holed.spacing_mm[0]
    assert apart.min() > 2.0  # of a hole with a radius of 2.5 mm
    frames, found = measured(replace(holed, sigma=0.0))
    mean = frames[:, found[3].rows, found[3].columns].mean(axis=1)
    assert_allclose(mean, holed.vial_signals[3], atol=0.02)


def test_few_good_voxels_are_left_out():
    """Noise alone: a 4.5 sigma rule on two measures leaves out well under one voxel in a hundred."""
    _, found = measured(scene(crescent(), matrix=128, sigma=0.03))
    out = sum(region.excluded for region in found)
    assert out <= 0.01 * sum(len(region.rows) for region in found)


def test_shading_is_no_outlier():
    _, found = measured(scene(crescent(), matrix=128, shading=(0.6, 0.7, 0.15), sigma=0.005))
    assert sum(region.excluded for region in found) <= 0.01 * sum(len(region.rows) for region in found)


def test_an_artefact_in_one_frame_is_left_out():
    what = scene(crescent(), matrix=128, sigma=0.01)
    frames = paint(what, np.random.default_rng(1))
    rows, columns = what.placement.vial_centres(what.plate, what.spacing_mm)
    spot = (round(rows[5]), round(columns[5]))
    frames[2, spot[0], spot[1]] += 0.6
    lie = replace(what.placement, seen=tuple(vial.label for vial in what.plate.vials))
    region = regions(lie, what.plate, frames, what.spacing_mm)[5]
    assert spot not in set(zip(region.rows.tolist(), region.columns.tolist(), strict=True))
    assert 1 <= region.excluded <= 5


@pytest.mark.parametrize("water", [False, True])
def test_a_missing_vial_is_not_visible(water):
    what = scene(crescent(), water=water, gone=(4,))
    frames = paint(what, np.random.default_rng(2))
    placement = locate(frames, what.spacing_mm, what.plate)
    found = regions(placement, what.plate, frames, what.spacing_mm)
    assert [region.visible for region in found] == [k != 4 for k in range(len(found))]


def test_a_plate_partly_out_of_the_image_gives_empty_regions_there():
    what = scene(crescent())
    what.placement = replace(what.placement, centre_column=what.placement.centre_column + 40)
    _, found = measured(what)
    columns = what.placement.vial_centres(what.plate, what.spacing_mm)[1]
    for column, region in zip(columns, found, strict=True):
        assert np.all((region.columns >= 0) & (region.columns < 96))
        if column > 101:
            assert len(region.rows) == 0
            assert not region.visible


def test_a_single_frame_serves():
    what = scene(crescent())
    frames = paint(what, np.random.default_rng(1))
    lie = replace(what.placement, seen=tuple(vial.label for vial in what.plate.vials))
    one = regions(lie, what.plate, frames[len(TI_MS)], what.spacing_mm)
    many = regions(lie, what.plate, frames[len(TI_MS) : len(TI_MS) + len(TE_MS)], what.spacing_mm)
    assert [region.label for region in one] == [region.label for region in many]
    assert all(region.visible for region in one)
