"""Texts that a recipe's patterns accept."""

import re

import pytest

from qa.errors import SiteError
from qa.simulate.wording import accepted


@pytest.mark.parametrize(
    "pattern",
    [
        "IR.*",
        "QA IR.*",
        "^ME",
        "T1",
        "(IR|TI).*",
        r"^T2\s+train$",
        r"se_\d+",
        ".*multi.*",
        r"a\.b.*",
        "(?:one|two) [0-9]+",
        r"\bIR\b.*",
        "(?i)qa (ir|se)( train)?.*",
    ],
)
@pytest.mark.parametrize("tail", ["", "TI35"])
def test_text_is_found_by_the_pattern(pattern, tail):
    assert re.search(pattern, accepted(pattern, tail))


def test_the_tail_is_kept_where_the_pattern_lets_it():
    assert accepted("IR.*", "TI35") == "IR TI35"
    assert accepted("IR", "TI35") == "IR"


def test_a_pattern_beyond_it_is_named():
    with pytest.raises(SiteError, match="cannot think of"):
        accepted(r"(?<=x)[^abc]{7}(?!y)\W")
