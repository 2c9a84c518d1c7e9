"""Limits in force: dated, the most specific first, never changed backwards."""

from datetime import date, timedelta

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from qa.errors import SiteError
from qa.site import LimitBlock, in_force, load_limits
from qa.words import Quantity

DAY = date(2026, 3, 2)
STREAM = (Quantity.T1, "1", "North")


def block(since=date(2026, 1, 1), watch=3.0, act=5.0, **more):
    return LimitBlock(since=since, watch_percent=watch, act_percent=act, **more)


def chosen(blocks, day=DAY, stream=STREAM):
    return in_force(tuple(blocks), day, *stream)


# --- by hand ---


def test_a_block_holds_from_its_first_day_on():
    one = block()
    assert chosen([one], date(2025, 12, 31)) == {}
    assert chosen([one], date(2026, 1, 1)) == {"baseline": one}
    assert chosen([one], date(2090, 1, 1)) == {"baseline": one}


def test_a_later_block_replaces_an_earlier_one_from_its_day_on_whatever_their_order():
    old, new = block(), block(date(2026, 3, 2), act=4.0)
    for blocks in ([old, new], [new, old]):
        assert chosen(blocks, date(2026, 3, 1)) == {"baseline": old}
        assert chosen(blocks, date(2026, 3, 2)) == {"baseline": new}


def test_of_two_equals_the_later_in_the_file_holds():
    first, second = block(act=4.0), block(act=6.0)
    assert chosen([first, second]) == {"baseline": second}
    assert chosen([second, first]) == {"baseline": first}


def test_the_more_specific_block_wins_over_the_later_one():
    of_vial = block(vials=("1",), act=9.0)
    of_both = block(vials=("1",), scanner="North", act=10.0)
    later = block(date(2026, 2, 1))
    assert chosen([of_vial, later]) == {"baseline": of_vial}
    assert chosen([of_both, of_vial, later]) == {"baseline": of_both}
    assert chosen([of_both, of_vial, later], stream=(Quantity.T1, "1", "South")) == {"baseline": of_vial}
    assert chosen([of_both, of_vial, later], stream=(Quantity.T1, "2", "North")) == {"baseline": later}


def test_baseline_and_reference_have_limits_of_their_own():
    one, other = block(), block(against="reference", quantity=Quantity.T1)
    assert chosen([one, other]) == {"baseline": one, "reference": other}
    assert chosen([one, other], stream=(Quantity.T2, "1", "North")) == {"baseline": one}


@pytest.mark.parametrize(
    ("more", "stream", "covered"),
    [
        ({}, STREAM, True),
        ({"quantity": Quantity.T2}, STREAM, False),
        ({"vials": ("1", "2")}, (Quantity.T2, "2", "North"), True),
        ({"vials": ("11",)}, STREAM, False),
        ({"vials": ()}, STREAM, False),
        ({"scanner": "South"}, STREAM, False),
        ({"scanner": "North", "quantity": Quantity.T1, "vials": ("1",)}, STREAM, True),
    ],
)
def test_what_a_block_covers(more, stream, covered):
    assert block(**more).covers(*stream) is covered
    assert block(**more).selectors == len(more)


@pytest.mark.parametrize(
    "wrong", [{"watch": 6.0}, {"watch": 0.0}, {"act": -1.0}, {"watch": float("nan")}, {"act": float("inf")}]
)
def test_limits_that_make_no_sense_are_refused(wrong):
    with pytest.raises(ValidationError):
        block(**wrong)


def test_a_block_cannot_be_changed():
    with pytest.raises(ValidationError):
        block().act_percent = 9.0


# --- the file ---


def test_dated_blocks_are_read_in_the_order_of_the_file(tmp_path):
    path = tmp_path / "limits.toml"
    lines = [
        f'[[limits]]\nsince = {day}\nquantity = "T1"\nwatch_percent = 3\nact_percent = {act}\n'
        for day, act in (("2026-03-01", 4), ("2026-01-01", 5))
    ]
    path.write_text("\n".join(lines), encoding="utf-8")
    blocks = load_limits(path, ["North"])
    assert [(one.since, one.act_percent) for one in blocks] == [(date(2026, 3, 1), 4.0), (date(2026, 1, 1), 5.0)]
    assert chosen(blocks, date(2026, 2, 1))["baseline"].act_percent == 5.0
    assert load_limits(tmp_path / "none.toml", []) == ()


@pytest.mark.parametrize("since", ["2026-02-30", "2026-1-1", '"soon"', "2026", "2026-01-01T07:30:00"])
def test_a_date_that_is_none_is_named_with_its_line(tmp_path, since):
    path = tmp_path / "limits.toml"
    path.write_text(f"# tolerances\n[[limits]]\nsince = {since}\nwatch_percent = 3\nact_percent = 5\n")
    with pytest.raises(SiteError, match=r"limits\.toml(.|\n)*line 3"):
        load_limits(path, [])


# --- whatever the blocks ---

days = st.dates(date(2024, 1, 1), date(2027, 12, 31))
streams = st.tuples(st.sampled_from(Quantity), st.sampled_from("123"), st.sampled_from(("North", "South")))


@st.composite
def any_block(draw):
    watch = draw(st.floats(0.1, 10))
    return LimitBlock(
        since=draw(days),
        quantity=draw(st.none() | st.sampled_from(Quantity)),
        vials=draw(st.none() | st.lists(st.sampled_from("123"), unique=True, max_size=3).map(tuple)),
        scanner=draw(st.none() | st.sampled_from(("North", "South"))),
        watch_percent=watch,
        act_percent=watch + draw(st.floats(0, 10)),
        against=draw(st.sampled_from(("baseline", "reference"))),
    )


blocks_of_any_kind = st.lists(any_block(), max_size=7).map(tuple)


@settings(max_examples=60)
@given(blocks=blocks_of_any_kind, day=days, stream=streams)
def test_the_block_in_force_covers_the_stream_and_no_other_that_does_is_before_it(blocks, day, stream):
    found = in_force(blocks, day, *stream)
    able = [one for one in blocks if one.since <= day and one.covers(*stream)]
    assert set(found) == {one.against for one in able}
    for against, held in found.items():
        assert held in able
        assert held.against == against
        for other in able:
            if other.against == against:
                assert (other.selectors, other.since) <= (held.selectors, held.since)


@settings(max_examples=60)
@given(blocks=blocks_of_any_kind, more=blocks_of_any_kind, day=days, stream=streams, gap=st.integers(1, 400))
def test_blocks_dated_later_change_nothing_earlier(blocks, more, day, stream, gap):
    later = tuple(one.model_copy(update={"since": day + timedelta(days=gap)}) for one in more)
    before = in_force(blocks, day, *stream)
    assert in_force(blocks + later, day, *stream) == before
    assert in_force(later + blocks, day, *stream) == before


@settings(max_examples=40)
@given(blocks=blocks_of_any_kind, day=days, stream=streams)
def test_blocks_of_other_streams_change_nothing(blocks, day, stream):
    of_stream = tuple(one for one in blocks if one.covers(*stream))
    assert in_force(blocks, day, *stream) == in_force(of_stream, day, *stream)
