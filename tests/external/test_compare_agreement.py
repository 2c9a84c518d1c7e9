"""The statistics of agreement, put before published studies."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from qa.compare.intervals import combined_freedom, sum_interval
from qa.compare.linearity import weighted_line
from qa.compare.pairs import Repeats, concordance, limits_of_agreement
from qa.compare.precision import SMALLEST_CHANGE, h_critical, k_critical, mandel, precision
from qa.compare.reml import reml

# ISO 5725-2:1994, annex B.1: sulfur content of coal, % by mass, eight laboratories (from memory, answers too)
COAL = {
    1: [
        [0.71, 0.71, 0.7, 0.71],
        [0.69, 0.67, 0.68],
        [0.66, 0.65, 0.69],
        [0.67, 0.65, 0.66],
        [0.7, 0.69, 0.66, 0.71, 0.69],
        [0.73, 0.74, 0.73],
        [0.71, 0.71, 0.69],
        [0.7, 0.65, 0.68],
    ],
    3: [
        [1.68, 1.7, 1.68, 1.69],
        [1.64, 1.64, 1.65],
        [1.61, 1.61, 1.62],
        [1.68, 1.66, 1.66],
        [1.64, 1.67, 1.6, 1.66, 1.68],
        [1.7, 1.73, 1.73],
        [1.69, 1.7, 1.68],
        [1.67, 1.68, 1.67],
    ],
    4: [
        [3.26, 3.26, 3.2, 3.24],
        [3.2, 3.2, 3.2],
        [3.37, 3.36, 3.38],
        [3.16, 3.22, 3.23],
        [3.2, 3.19, 3.18, 3.27, 3.24],
        [3.27, 3.31, 3.29],
        [3.27, 3.24, 3.23],
        [3.25, 3.26, 3.26],
    ],
}
COAL_ANSWERS = {1: (0.690, 0.015, 0.026), 3: (1.667, 0.017, 0.035), 4: (3.250, 0.026, 0.058)}  # mean, s_r, s_R

# AIAG, Measurement Systems Analysis, 4th edition: ten parts, appraisers A, B, C, three trials each
GAUGE = np.array(
    [  # part x appraiser x trial
        [[0.29, 0.41, 0.64], [0.08, 0.25, 0.07], [0.04, -0.11, -0.15]],
        [[-0.56, -0.68, -0.58], [-0.47, -1.22, -0.68], [-1.38, -1.13, -0.96]],
        [[1.34, 1.17, 1.27], [1.19, 0.94, 1.34], [0.88, 1.09, 0.67]],
        [[0.47, 0.5, 0.64], [0.01, 1.03, 0.2], [0.14, 0.2, 0.11]],
        [[-0.8, -0.92, -0.84], [-0.56, -1.2, -1.28], [-1.46, -1.07, -1.45]],
        [[0.02, -0.11, -0.21], [-0.2, 0.22, 0.06], [-0.29, -0.67, -0.49]],
        [[0.59, 0.75, 0.66], [0.47, 0.55, 0.83], [0.02, 0.01, 0.21]],
        [[-0.31, -0.2, -0.17], [-0.63, 0.08, -0.34], [-0.46, -0.56, -0.49]],
        [[2.26, 1.99, 2.01], [1.8, 2.12, 2.19], [1.77, 1.45, 1.87]],
        [[-1.36, -1.25, -1.31], [-1.68, -1.62, -1.5], [-1.49, -1.77, -2.16]],
    ]
)

# Bland and Altman (1986), Lancet i, 307-310, table 1: peak expiratory flow (l/min), two readings by each of two meters
FLOW = np.array(
    [  # Wright meter 1, 2, mini meter 1, 2
        [494, 490, 512, 525],
        [395, 397, 430, 415],
        [516, 512, 520, 508],
        [434, 401, 428, 444],
        [476, 470, 500, 500],
        [557, 611, 600, 625],
        [413, 415, 364, 460],
        [442, 431, 380, 390],
        [650, 638, 658, 642],
        [433, 429, 445, 432],
        [417, 420, 432, 420],
        [656, 633, 626, 605],
        [267, 275, 260, 227],
        [478, 492, 477, 467],
        [178, 165, 259, 268],
        [423, 372, 350, 370],
        [427, 421, 451, 443],
    ],
    dtype=np.float64,
)


@pytest.mark.parametrize("level", [1, 3, 4])
def test_repeatability_and_reproducibility_of_the_standard(level):
    found = precision([np.array(lab) for lab in COAL[level]])
    mean, s_r, s_R = COAL_ANSWERS[level]
    assert found.mean == pytest.approx(mean, abs=6e-4)
    assert found.s_r == pytest.approx(s_r, abs=6e-4)
    assert found.s_R == pytest.approx(s_R, abs=6e-4)


def test_reproducibility_lies_within_its_interval():
    found = precision([np.array(lab) for lab in COAL[4]])
    low, high = found.s_R_interval()
    assert low < found.s_R < high
    low, high = found.s_r_interval()
    # 27 results of 8 laboratories; chi square with 19 degrees of freedom: 8.907 and 32.852 (statistical tables)
    expected = found.s_r * np.sqrt(19 / 32.852), found.s_r * np.sqrt(19 / 8.907)
    assert (low, high) == pytest.approx(expected, rel=1e-4)


def test_critical_values_of_mandel():
    # ISO 5725-2:1994, 8.3.1 tables 6 and 7 (from memory): h of six laboratories; ASTM E691 at 0.5 % for eight
    assert h_critical(6, 0.01) == pytest.approx(1.87, abs=0.005)
    assert h_critical(6, 0.05) == pytest.approx(1.66, abs=0.005)
    assert h_critical(8, 0.005) == pytest.approx(2.15, abs=0.005)
    # the standard's own formula for equal numbers: sqrt(p F / (F + p - 1))
    from scipy.stats import f

    p, n = 8, 4
    at = f.isf(0.01, n - 1, (p - 1) * (n - 1))
    assert_allclose(k_critical(np.full(p, n - 1.0), 0.01), np.sqrt(p * at / (at + p - 1)), rtol=1e-10)


def test_mandel_on_the_coal_study():
    found = mandel([np.array(lab) for lab in COAL[4]])
    assert found.h[2] == np.nanmax(found.h)  # laboratory 3 reads highest, and is flagged at level 4
    assert found.h[2] > found.h_critical_5
    assert found.h.sum() == pytest.approx(0.0, abs=1e-9)


def test_variance_components_of_the_gauge_study():
    # pooled analysis of variance; restricted likelihood equals it in a balanced study whose interaction is nil
    part, appraiser = np.meshgrid(np.arange(10), np.arange(3), indexing="ij")
    values = GAUGE.ravel()
    found = reml(values, np.repeat(appraiser.ravel(), 3), np.repeat(part.ravel(), 3), np.arange(90))
    assert found.rest == pytest.approx(0.03997327635, rel=1e-6)
    assert found.scanner == pytest.approx(0.05145526116, rel=1e-6)
    assert found.vial == pytest.approx(1.08644660441, rel=1e-6)
    assert found.scanner_vial == 0.0
    # printed: EV 0.199933, AV 0.226838, PV 1.042327
    assert np.sqrt([found.rest, found.scanner, found.vial]) == pytest.approx([0.199933, 0.226838, 1.042327], abs=6e-7)


def test_limits_of_agreement_of_the_flow_meters():
    found = limits_of_agreement(FLOW[:, 0] - FLOW[:, 2])
    assert found.bias == pytest.approx(-2.1, abs=0.05)
    assert found.spread == pytest.approx(38.8, abs=0.05)
    assert found.bias_interval == pytest.approx((-22.0, 17.8), abs=0.06)
    # the paper takes 2 for 1.96
    assert (found.lower + 0.04 * -found.spread, found.upper + 0.04 * found.spread) == pytest.approx(
        (-79.7, 75.5), abs=0.2
    )
    half = (found.lower_interval[1] - found.lower_interval[0]) / 2
    assert half == pytest.approx((114.3 - 45.1) / 2, abs=0.2)


def test_means_of_two_readings_are_corrected_to_single_ones():
    sides = [Repeats(float(np.mean(np.var(pair, axis=1, ddof=1))), 17.0, 0.5) for pair in (FLOW[:, :2], FLOW[:, 2:])]
    found = limits_of_agreement(FLOW[:, :2].mean(axis=1) - FLOW[:, 2:].mean(axis=1), *sides)
    assert found.spread == pytest.approx(37.7, abs=0.05)  # uncorrected: 33.2
    assert found.bias == pytest.approx(-6.03, abs=0.005)


def test_concordance():
    # Lin (1989), Biometrics 45, 255-268: the formula's own small cases, and the flow meters worked out by it
    x = np.arange(1.0, 6.0)
    assert concordance(x, x + 1.0)[0] == pytest.approx(0.8)
    assert concordance(x, 2.0 * x)[0] == pytest.approx(8 / 19)
    assert concordance(x, 6.0 - x)[0] == pytest.approx(-1.0)
    ccc, interval = concordance(FLOW[:, 0], FLOW[:, 2])
    assert ccc == pytest.approx(0.94274243, abs=1e-8)
    assert interval == pytest.approx((0.850492, 0.978726), abs=1e-6)  # Lin (2000), Biometrics 56, 324-325


def test_the_smallest_change_is_what_the_standard_calls_the_limit():
    # ISO 5725-6: r = 2.8 s_r; a published cross-test of sulfur in aggregates: s_r 0.021, 0.042, 0.047 gave r 0.059 ...
    assert [SMALLEST_CHANGE * s for s in (0.021, 0.042, 0.047)] == pytest.approx([0.059, 0.118, 0.131], abs=0.0022)


def test_weighted_line_against_numpy():
    x, y, w = np.array([1.0, 2.0, 4.0, 7.0]), np.array([1.1, 1.9, 4.3, 6.6]), np.array([1.0, 4.0, 2.0, 0.5])
    found, covariance, chi2 = weighted_line(x, y, w)
    slope, intercept = np.polyfit(x, y, 1, w=np.sqrt(w))
    assert found == pytest.approx([intercept, slope])
    assert chi2 == pytest.approx(float(w @ (y - intercept - slope * x) ** 2))
    unscaled = np.polyfit(x, y, 1, w=np.sqrt(w), cov="unscaled")[1]
    assert covariance == pytest.approx(unscaled[::-1, ::-1])


def test_sum_of_variances_covers_its_truth():
    # Graybill and Wang (1980): at least the stated confidence in balanced one-way layouts
    rng = np.random.default_rng(3)
    caught = 0
    for _ in range(1500):
        between, within = 4.0 * rng.chisquare(4) / 4, 1.0 * rng.chisquare(20) / 20
        low, high = sum_interval([(between, 4.0), (within, 20.0)])
        caught += low <= np.sqrt(5.0) <= high
    assert 0.94 < caught / 1500 < 0.985


def test_combined_freedom_of_equal_parts_adds_up():
    assert combined_freedom([(1.0, 5.0), (1.0, 5.0)]) == pytest.approx(10.0)  # Welch (1947)
    assert combined_freedom([(1.0, 5.0), (0.0, 1.0)]) == pytest.approx(5.0)
