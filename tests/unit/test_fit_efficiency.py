"""The fits reach the Cramér-Rao bound and say so (the long table: python tests/bench/accuracy.py --efficiency 5000)."""

import pytest
from fit_signals import CASES, efficiency

TRIALS = 700  # the scatter is known to 2.7 %


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_scatter_is_at_the_bound_and_u_is_the_scatter(case):
    scatter, bias, stated = efficiency(case, TRIALS, seed=7)
    assert 0.9 < scatter < 1.1
    assert abs(bias) < 0.15
    assert 0.9 < stated < 1.1
