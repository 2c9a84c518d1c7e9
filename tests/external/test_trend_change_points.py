"""The search for changes, put before the Nile and before SciPy's trend estimates."""

from dataclasses import replace
from io import StringIO

import numpy as np
import pytest
from scipy import stats

from qa.trend.change import find_change, measure
from qa.trend.changes import find_changes

# Annual flow of the Nile at Aswan 1871-1970, 1e8 cubic metres: Cobb (1978), Biometrika 65, 243-251;
# Durbin and Koopman (2001), Time Series Analysis by State Space Methods
NILE = np.loadtxt(
    StringIO("""
    1120 1160 963 1210 1160 1160 813 1230 1370 1140 995 935 1110 994 1020 960 1180 799 958 1140
    1100 1210 1150 1250 1260 1220 1030 1100 774 840 874 694 940 833 701 916 692 1020 1050 969
    831 726 456 824 702 1120 1100 832 764 821 768 845 864 862 698 845 744 796 1040 759
    781 865 845 944 984 897 822 1010 771 676 649 846 812 742 801 1040 860 874 848 890
    744 749 838 1050 918 986 797 923 975 815 1020 906 901 1170 912 746 919 718 714 740
    """)
).ravel()
YEARS = np.arange(1871.0, 1971.0)
DAYS = (YEARS - 1871.0) * 365.25


def of_kind(kind, onset):
    """A change of which only kind and onset matter."""
    return replace(nile(), kind=kind, onset=onset)


def nile():
    change = find_change(DAYS, NILE, np.ones(100))
    assert change is not None
    return change


def test_the_nile_fell_by_a_step_after_1898():
    change = nile()
    assert change.kind == "step"
    assert 1871 + change.onset / 365.25 == pytest.approx(1899)  # first year of the low level; 1898 is the last high one
    assert 1871 + change.earliest / 365.25 <= 1898 < 1871 + change.latest / 365.25 + 1
    assert change.chance < 1e-6


def test_its_size_is_the_difference_of_the_two_means():
    # means 1097.75 (1871-1898) and 849.9722 (1899-1970)
    assert nile().size == pytest.approx(849.9722222 - 1097.75, abs=1e-6)


def test_there_is_no_second_change_in_the_nile():
    assert len(find_changes(DAYS, NILE, np.ones(100), alpha=0.01)) == 1


@pytest.mark.parametrize("seed", range(5))
def test_a_known_step_is_measured_as_by_a_t_test(seed):
    rng = np.random.default_rng(seed)
    y = rng.standard_normal(30) + 2.0 * (np.arange(30) >= 12)
    size, u = measure(of_kind("step", 84.0), np.arange(30) * 7.0, y, np.ones(30))
    test = stats.ttest_ind(y[12:], y[:12])
    assert size == pytest.approx(y[12:].mean() - y[:12].mean())
    assert size / u == pytest.approx(test.statistic, rel=1e-9)


@pytest.mark.parametrize("seed", range(5))
def test_a_slope_from_the_start_is_that_of_linear_regression(seed):
    rng = np.random.default_rng(seed)
    t = np.arange(40) * 7.0
    y = 3.0 * t / 365.25 + 0.3 * rng.standard_normal(40)
    size, u = measure(of_kind("slope", 0.0), t, y, np.ones(40) * 0.3)
    line = stats.linregress(t / 365.25, y)
    assert size == pytest.approx(line.slope, rel=1e-9)
    assert u == pytest.approx(line.stderr, rel=1e-9)
