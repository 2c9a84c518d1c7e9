"""Physics that a reading must not contradict in silence."""

from qa.plausible import doubts
from qa.words import Quantity


def sentences(value, u, t1, *, quantity=Quantity.T2, voxels=50, excluded=0):
    return doubts(quantity, value, u, t1, voxels, excluded, few_voxels=5)


def test_t2_longer_than_t1_is_said_only_beyond_their_uncertainty():
    assert sentences(120.0, 1.0, (100.0, 1.0))
    assert not sentences(101.0, 1.0, (100.0, 1.0))
    assert not sentences(120.0, 15.0, (100.0, 1.0))
    assert not sentences(90.0, 1.0, (100.0, 1.0))
    assert not sentences(120.0, 1.0, None)


def test_the_check_is_for_t2_alone():
    assert not sentences(120.0, 1.0, (100.0, 1.0), quantity=Quantity.T1)


def test_few_voxels_and_many_outliers_are_said():
    assert "4 voxels" in sentences(90.0, 1.0, None, voxels=4)[0]
    assert "30 of 80" in sentences(90.0, 1.0, None, excluded=30)[0]
    assert not sentences(90.0, 1.0, None, excluded=10)
