"""Agreement of scanners over whole histories: truth recovered, gaps explained, bounds kept."""

import json
from datetime import date, timedelta

import histories
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.compare import agree
from qa.compare.precision import SMALLEST_CHANGE

THREE = ("North bay", "South bay", "East bay")
T1 = (("T1 IR", "T1"),)
START = date(2024, 1, 1)


def campaign(**told):
    return histories.history(
        histories.Campaign(**{"scanners": THREE, "vials": 8, "runs": 40, "scans": T1, "own_percent": 0.5, **told})
    )


def one(frame, **told):
    (comparison,) = agree(frame, **told).comparisons
    return comparison


def moved(frame, percent, scanner):
    here = frame["scanner"] == scanner
    frame.loc[here, ["value_ms", "value_at_reference_ms"]] *= 1.0 + percent / 100.0
    frame.loc[here, "deviation_percent"] += percent
    return frame


def test_bias_of_each_scanner_against_the_references():
    frame = campaign()
    plain = {row.scanner: row for row in one(frame).scanners}
    row = {row.scanner: row for row in one(moved(frame, 3.0, "South bay")).scanners}["South bay"]
    assert row.bias_percent == pytest.approx(plain["South bay"].bias_percent + 3.0)
    assert row.bias_interval[0] < row.bias_percent < row.bias_interval[1]
    assert (row.runs, row.vials, row.first) == (40, 8, START)


def test_linearity_recovers_a_slope():
    frame = campaign(own_percent=0.2, common_percent=0.05)
    frame["deviation_percent"] -= frame.groupby(["scanner", "vial"])["deviation_percent"].transform("mean")
    row = one(moved(frame, 2.0, "East bay")).scanners[0]
    assert row.scanner == "East bay"
    assert row.slope == pytest.approx(1.02, abs=1e-3)
    assert row.slope_interval[0] < 1.02 < row.slope_interval[1]
    assert row.intercept_interval_ms[0] < 0.0 < row.intercept_interval_ms[1]


def test_within_scanner_scatter_is_that_of_the_campaign():
    rows = one(campaign(runs=150, own_percent=0.5, common_percent=0.3)).scanners
    own = 0.5 * np.geomspace(1.4, 0.72, 8)
    truth = float(np.sqrt(np.mean(own**2) + 0.3**2))
    for row in rows:
        assert row.within_cv_percent == pytest.approx(truth, rel=0.12)
        assert row.within_cv_interval[0] < row.within_cv_percent < row.within_cv_interval[1]


def test_variance_components_are_recovered():
    frame = campaign(runs=80, own_percent=0.4, common_percent=0.5)
    found = one(frame).variances
    assert found.run_percent == pytest.approx(0.5, rel=0.15)
    assert found.rest_percent == pytest.approx(0.4 * np.sqrt(np.mean(np.geomspace(1.4, 0.72, 8) ** 2)), rel=0.1)
    assert found.scanner_vial_percent == pytest.approx(1.0, rel=0.4)  # each vial's bias is drawn with SD 1
    assert found.s_R_percent == pytest.approx(
        np.sqrt(found.s_r_percent**2 + found.scanner_percent**2 + found.scanner_vial_percent**2)
    )


def test_the_smallest_change_follows_from_the_scatter():
    found = one(campaign())
    assert found.smallest_change.single_scanner_percent == pytest.approx(SMALLEST_CHANGE * found.variances.s_r_percent)
    assert found.smallest_change.any_two_percent == pytest.approx(SMALLEST_CHANGE * found.variances.s_R_percent)
    assert found.smallest_change.single_scanner_percent < found.smallest_change.any_two_percent


def test_a_scanner_apart_is_flagged_at_every_level():
    names = ("A", "B", "C", "D", "E", "F")
    frame = moved(campaign(scanners=names, runs=10), 15.0, "D")
    for level in one(frame).levels:
        flags = {cell.scanner: cell.h_flag for cell in level.scanners}
        assert flags["D"] == "1 %"
        assert {flag for name, flag in flags.items() if name != "D"} == {None}


def test_a_scanner_that_scatters_is_flagged_by_k():
    frame = campaign(runs=20)
    here = frame["scanner"] == "North bay"
    frame.loc[here, "deviation_percent"] += 3.0 * np.random.default_rng(1).standard_normal(int(here.sum()))
    for level in one(frame).levels:
        cell = next(cell for cell in level.scanners if cell.scanner == "North bay")
        assert cell.k_flag == "1 %"
        assert cell.k > cell.k_critical[1] > cell.k_critical[0] > 1.0


def test_pairs_are_first_minus_second_and_symmetric():
    frame = moved(campaign(), 4.0, "South bay")
    pairs = {(pair.first, pair.second): pair for pair in one(frame).pairs}
    assert set(pairs) == {("East bay", "North bay"), ("East bay", "South bay"), ("North bay", "South bay")}
    pair = pairs["North bay", "South bay"]
    assert pair.bias_interval[0] < pair.bias_percent < pair.bias_interval[1] < 0
    assert pair.lower_limit_percent < pair.bias_percent < pair.upper_limit_percent
    swapped = frame.replace({"scanner": {"North bay": "Z", "South bay": "A"}})
    other = next(p for p in one(swapped).pairs if (p.first, p.second) == ("A", "Z"))
    assert other.bias_percent == pytest.approx(-pair.bias_percent)
    assert other.upper_limit_percent == pytest.approx(-pair.lower_limit_percent)
    assert other.concordance == pytest.approx(pair.concordance)


def test_limits_of_agreement_hold_single_readings():
    frame = campaign(runs=120)
    pair = one(frame).pairs[0]
    wide = frame.pivot_table(index=["vial", "acquired"], columns="scanner", values="deviation_percent")
    rng = np.random.default_rng(2)
    inside = []
    for _, rows in wide.groupby("vial"):
        first = rng.permutation(rows[pair.first].dropna().to_numpy())
        second = rng.permutation(rows[pair.second].dropna().to_numpy())
        apart = first - second
        inside += list((apart > pair.lower_limit_percent) & (apart < pair.upper_limit_percent))
    assert np.mean(inside) > 0.9


@pytest.mark.parametrize(("shift", "kind"), [(histories.step(140.0, 3.0, scanner=1), "step"), (None, None)])
def test_who_left_and_when(shift, kind):
    agreement = agree(campaign(shift=shift))
    if kind is None:
        assert agreement.departures == ()
        return
    (departure,) = agreement.departures
    assert (departure.scanner, departure.kind, departure.others) == ("South bay", kind, ("East bay", "North bay"))
    assert departure.onset_interval[0] < START + timedelta(days=140) <= departure.onset_interval[1]
    assert departure.size_interval[0] < 3.0 < departure.size_interval[1]
    assert departure.now_percent == pytest.approx(3.0, abs=0.5)
    assert departure.returned is None


def test_a_drift_is_a_departure_with_a_rate():
    (departure,) = agree(campaign(runs=80, shift=histories.slope(3.0, 200.0, scanner=0))).departures
    assert (departure.scanner, departure.kind) == ("North bay", "slope")
    assert departure.percent_per_year == pytest.approx(3.0, abs=0.6)


def test_of_two_scanners_the_one_that_moved_has_left():
    (departure,) = agree(campaign(scanners=THREE[:2], shift=histories.step(140.0, 3.0, scanner=0))).departures
    assert departure.scanner == "North bay"


def test_one_that_came_back_is_told_apart():
    def there_and_back(s, p, v, q, days):
        return 4.0 * ((days >= 140.0) & (days < 280.0)) * (s == 1)

    agreement = agree(campaign(runs=70, shift=there_and_back))
    assert agreement.departures == ()
    (departure,) = agreement.returned
    assert departure.scanner == "South bay"
    assert departure.returned == START + timedelta(days=280)


def test_an_ageing_vial_makes_nobody_leave():
    assert agree(campaign(runs=80, shift=histories.slope(-5.0, 150.0, vial=3))).departures == ()


def test_a_scanner_with_a_phantom_of_its_own_is_compared_with_all():
    frame = campaign(
        phantoms=("Plate A", "Plate B"), pairs=[(0, 0), (1, 0), (2, 1)], shift=histories.step(140.0, 3.0, scanner=2)
    )
    agreement = agree(frame)
    (departure,) = agreement.departures
    assert departure.scanner == "East bay"
    assert any("No other scanner measures Plate B" in reason for reason in departure.reasons)
    assert "Plate B was measured on East bay only." in agreement.comparisons[0].remarks
    pair = next(pair for pair in agreement.comparisons[0].pairs if pair.first == "East bay")
    assert pair.bias_percent is None
    assert pair.not_given["bias_percent"] == "they share no vial of one phantom"


@settings(max_examples=10, deadline=None)
@given(first=st.integers(0, 150), last=st.integers(0, 280))
def test_bounds_are_whole_days_and_inclusive(first, last):
    frame = campaign(vials=3)
    since, until = START + timedelta(days=first), START + timedelta(days=last)
    agreement = agree(frame, since=since, until=until)
    days = frame["acquired"].dt.date
    kept = frame[(days >= since) & (days <= until)]
    assert agreement.runs == kept["run"].nunique()
    if agreement.runs:
        assert agreement.first >= since
        assert agreement.last <= until
    assert (agreement.since, agreement.until) == (since, until)


def test_void_runs_and_readings_without_a_number_do_not_count():
    frame = campaign(runs=10)
    bad = frame.copy()
    last = bad["run"].iloc[-1]
    bad.loc[bad["run"] == last, "run_void"] = True
    bad.loc[bad["run"] == last, ["value_ms", "value_at_reference_ms", "deviation_percent"]] *= 5.0
    assert agree(bad).as_dict() == agree(frame[frame["run"] != last]).as_dict()
    bad = frame.copy()
    bad.loc[0, ["state", "deviation_percent"]] = ["not determined", 99.0]
    assert agree(bad).as_dict() == agree(frame.drop(index=0)).as_dict()


THIN = {
    "one scanner": ({"scanners": THREE[:1]}, {"s_R_percent", "any_two_percent"}),
    "one run each": ({"runs": 1}, {"s_r_percent", "s_R_percent", "within_cv_percent", "single_scanner_percent"}),
    "one vial": ({"vials": 1}, {"slope", "vial_percent", "concordance"}),
    "one reading": ({"scanners": THREE[:1], "vials": 1, "runs": 1}, {"s_r_percent", "slope", "within_cv_percent"}),
    "nothing shared": (
        {"phantoms": ("A", "B", "C"), "pairs": [(0, 0), (1, 1), (2, 2)]},
        {"bias_percent", "s_R_percent"},
    ),
}


@pytest.mark.parametrize("name", THIN)
def test_what_cannot_be_given_is_none_with_a_reason(name):
    told, expected = THIN[name]
    agreement = agree(campaign(**told))
    document = json.loads(json.dumps(agreement.as_dict(), allow_nan=False))
    reasons: dict[str, str] = {}
    for row in rows_of(document):
        for field, reason in row["not_given"].items():
            assert row.get(field) is None
            assert len(reason) > 10
            reasons[field] = reason
        given = {key for key, value in row.items() if value is not None}
        unexplained = {key for key in row if key.endswith(("_percent", "cv_interval")) and key not in given}
        assert {key.removesuffix("_interval") for key in unexplained} <= explained(row["not_given"])
    assert expected <= set(reasons)


def rows_of(document):
    """Every object of the document that says what it could not give."""
    if isinstance(document, dict):
        if "not_given" in document:
            yield document
        for value in document.values():
            yield from rows_of(value)
    elif isinstance(document, list):
        for value in document:
            yield from rows_of(value)


def explained(not_given):
    """Fields for which a reason stands, also for their uncertainties and intervals."""
    pairs = {"lower_limit_percent": {"upper_limit_percent"}, "bias_percent": {"u_bias_percent"}}
    pairs |= {"bias_interval": {"u_bias_percent"}, "within_cv_percent": {"within_cv"}}
    pairs |= {"between_cv_percent": {"between_cv"}}
    return set(not_given) | {more for field in not_given for more in pairs.get(field, set())}


def test_without_references_scanners_are_compared_with_each_other():
    frame = campaign()
    with_reference = one(frame)
    for column in ("deviation_percent", "u_deviation_percent", "reference_ms", "u_reference_ms"):
        frame[column] = np.nan
    without = one(frame)
    assert {level.against for level in without.levels} == {"mean of the scanners"}
    assert all(row.bias_percent is None and row.slope is None for row in without.scanners)
    assert without.variances.s_r_percent == pytest.approx(with_reference.variances.s_r_percent, rel=0.02)
    assert without.pairs[0].bias_percent == pytest.approx(with_reference.pairs[0].bias_percent, abs=0.05)


def test_a_field_without_a_reference_has_no_part_in_that_level():
    frame = campaign()
    here = (frame["scanner"] == "South bay") & (frame["vial"] == "2")
    frame.loc[here, ["deviation_percent", "reference_ms"]] = np.nan
    comparison = one(frame)
    level = next(level for level in comparison.levels if level.vial == "2")
    assert [cell.scanner for cell in level.scanners] == ["East bay", "North bay"]
    assert "Plate A on South bay: nothing to compare for 1 of 8 vials (2)." in comparison.remarks


def test_missing_vials_and_unknown_uncertainties_are_borne():
    frame = campaign(missing=0.2)
    rng = np.random.default_rng(3)
    frame = frame[rng.random(len(frame)) > 0.1].copy()
    frame[["u_ms", "u_at_reference_ms", "u_deviation_percent", "u_reference_ms"]] = np.nan
    agreement = agree(frame)
    json.dumps(agreement.as_dict(), allow_nan=False)
    assert agreement.departures == ()
    assert all(row.bias_percent is not None for row in agreement.comparisons[0].scanners)


def test_nothing_to_compare_is_said():
    frame = campaign(runs=2)
    assert agree(frame.iloc[:0]).remarks == ("There is no reading yet.",)
    assert agree(frame, since=date(2030, 1, 1)).remarks == ("No reading in these days can be compared.",)


@settings(max_examples=8, deadline=None)
@given(st.randoms(use_true_random=False))
def test_the_order_of_rows_does_not_matter(random):
    frame = campaign(runs=6, vials=3)
    order = list(range(len(frame)))
    random.shuffle(order)
    assert agree(frame.iloc[order]).as_dict() == agree(frame).as_dict()
