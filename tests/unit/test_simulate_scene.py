"""A plate laid into an image: places, coil fields, fill, bubbles, absent vials, noise."""

from dataclasses import replace
from datetime import UTC, datetime

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qa.errors import VialbookError
from qa.simulate.scene import images, lay, parts, records, signals
from qa.simulate.truth import Bubble, PulsePair, RunTruth, ScannerTruth, Surroundings, VialTruth
from qa.site.plate import Plate, Vial
from qa.site.recipe import Scan

PLATE = Plate(
    name="three",
    vials=(
        Vial(label="a", x_mm=40.0, y_mm=10.0, radius_mm=9.0),
        Vial(label="b", x_mm=-20.0, y_mm=35.0, radius_mm=9.0),
        Vial(label="c", x_mm=-5.0, y_mm=-30.0, radius_mm=7.0),
    ),
)
FLAT = {"transmit_bow": 0.0, "transmit_tilt": (0.0, 0.0), "receive_bow": 0.0, "receive_tilt": (0.0, 0.0)}
SCANNER = ScannerTruth("s", 3.0, pulses=PulsePair("hard", "hard"), snr=1e9, **FLAT)
VIALS = tuple(VialTruth(label, t1, t2) for label, t1, t2 in (("a", 300, 30), ("b", 900, 80), ("c", 1500, 200)))
TRUTH = RunTruth(SCANNER, VIALS, datetime(2026, 11, 2, 8, tzinfo=UTC))
TRAIN = Scan(
    name="T2",
    quantity="T2",
    method="spin-echo-train",
    match={"SeriesDescription": "T2"},
    te_ms=(10.0, 20.0, 30.0),
    tr_ms=1e6,
)


def frames(truth, scan=TRAIN, seed=1):
    return images(scan, truth, PLATE, lay(PLATE, truth), np.random.default_rng(seed))


@settings(max_examples=25, deadline=None)
@given(
    rotation=st.floats(-180, 180),
    flipped=st.booleans(),
    across=st.floats(-10, 10),
    up=st.floats(-10, 10),
    scale=st.floats(0.97, 1.03),
)
def test_vials_lie_where_the_convention_says(rotation, flipped, across, up, scale):
    truth = replace(
        TRUTH,
        scanner=replace(SCANNER, gradient_scale=scale, filtering=0.46),
        rotation_deg=rotation,
        flipped=flipped,
        shift_mm=(across, up),
    )
    layout = lay(PLATE, truth)
    turn = np.exp(1j * np.deg2rad(rotation))
    rows, columns = np.mgrid[:96, :96]
    for index, vial in enumerate(PLATE.vials):
        place = scale * complex(-vial.x_mm if flipped else vial.x_mm, vial.y_mm) * turn + complex(across, up)
        assert_allclose(layout.columns[index], 47.5 + place.real / 2.0, atol=1e-9)
        assert_allclose(layout.rows[index], 47.5 - place.imag / 2.0, atol=1e-9)
        shape = layout.shapes[index]
        assert_allclose((rows * shape).sum() / shape.sum(), layout.rows[index], atol=0.05)
        assert_allclose((columns * shape).sum() / shape.sum(), layout.columns[index], atol=0.05)


def test_the_middle_of_a_vial_shows_its_signal():
    got = frames(replace(TRUTH, scanner=replace(SCANNER, filtering=0.46))).real
    for record, vial in zip(records(PLATE, TRUTH, lay(PLATE, TRUTH)), VIALS, strict=True):
        middle = got[:, round(record.row), round(record.column)]
        assert_allclose(middle, np.exp(-np.array(TRAIN.te_ms) / vial.t2_ms), rtol=0.01)  # 1 %: what ringing is left


def test_shading_multiplies_the_image():
    shaded = replace(SCANNER, receive_bow=-0.2, receive_tilt=(0.1, 0.0))
    plain, other = frames(TRUTH).real, frames(replace(TRUTH, scanner=shaded)).real
    at = (np.arange(96) - 47.5) * 2.0 / 100
    want = 1 - 0.2 * (at[None, :] ** 2 + at[:, None] ** 2) + 0.1 * at[None, :]
    assert_allclose(other, plain * want, atol=1e-6)


def test_the_flip_angle_is_followed_inside_a_vial():
    """Against the signal worked out anew for the flip angle of every voxel."""
    truth = replace(TRUTH, scanner=replace(SCANNER, transmit_level=0.9, transmit_bow=-0.3, transmit_tilt=(0.1, 0.05)))
    layout, got = lay(PLATE, truth), frames(truth).real
    record = records(PLATE, truth, layout)[0]
    for offset in (-3, 0, 3):
        row, column = round(record.row), round(record.column) + offset
        flip = np.array([layout.transmit[row, column]])
        want = signals(TRAIN, truth, np.array([300.0]), np.array([30.0]), flip)[0] * layout.shapes[0, row, column]
        assert_allclose(got[:, row, column], want, rtol=2e-3, atol=1e-3)  # 1e-3: ringing of the other vials


def test_temperature_moves_each_vial_by_its_own_coefficient():
    warm = tuple(replace(v, t1_per_k_percent=2.0, t2_per_k_percent=-0.5) for v in VIALS)
    truth = replace(TRUTH, vials=warm, celsius=22.5, t1_factor=1.03)
    for record, vial in zip(records(PLATE, truth, lay(PLATE, truth)), VIALS, strict=True):
        assert_allclose(record.t1_ms, vial.t1_ms * 1.05 * 1.03)
        assert_allclose(record.t2_ms, vial.t2_ms * (1 - 0.0125))


def test_bubble_and_absent_vial_are_dark():
    holed = (replace(VIALS[0], bubbles=(Bubble(2.0, 0.0, 3.0),)), replace(VIALS[1], absent=True), VIALS[2])
    truth = replace(TRUTH, vials=holed)
    layout = lay(PLATE, truth)
    whole = lay(PLATE, TRUTH)
    lost = (whole.shapes - layout.shapes).sum(axis=(1, 2)) * 4.0
    assert_allclose(lost, [np.pi * 9.0, np.pi * 81.0, 0.0], atol=1e-6)


def test_water_fills_the_gaps_but_not_vials_and_walls():
    truth = replace(TRUTH, surroundings=Surroundings(radius_mm=80.0, wall_mm=1.5))
    fill = lay(PLATE, truth).fill
    walls = sum(np.pi * (vial.radius_mm + 1.5) ** 2 for vial in PLATE.vials)
    assert_allclose(fill.sum() * 4.0, np.pi * 80.0**2 - walls, rtol=1e-6)
    got = frames(truth).real
    assert_allclose(got[0, 47, 47], np.exp(-10.0 / 1500.0), atol=0.03)


def test_a_forgotten_phantom_leaves_only_noise():
    truth = replace(TRUTH, empty=True, scanner=replace(SCANNER, snr=50.0), surroundings=Surroundings())
    assert np.abs(frames(truth)).max() < 8 / 50.0


def test_background_magnitude_is_rayleigh():
    # mean = sigma sqrt(pi/2), SD = 0.655 sigma: Gudbjartsson and Patz (1995), Magn. Reson. Med. 34, 910-914.
    truth = replace(TRUTH, empty=True, scanner=replace(SCANNER, snr=100.0))
    background = parts(frames(truth), truth)["magnitude"]
    assert_allclose(background.mean() * 100, np.sqrt(np.pi / 2), rtol=0.02)  # 27648 voxels: standard error 0.3 %
    assert_allclose(background.std() * 100, 0.6551, rtol=0.02)


def test_real_and_imaginary_parts_make_the_same_magnitude():
    got = frames(replace(TRUTH, scanner=replace(SCANNER, snr=40.0)))
    both = parts(got, replace(TRUTH, written="real-imaginary"))
    assert_allclose(np.hypot(both["real"], both["imaginary"]), np.abs(got))
    assert np.abs(both["imaginary"]).max() > 0.3  # the phase is not corrected


def test_an_uneven_echo_train_is_refused_with_its_name():
    uneven = TRAIN.model_copy(update={"te_ms": (10.0, 25.0)})
    with pytest.raises(VialbookError, match="'T2'"):
        frames(TRUTH, uneven)
