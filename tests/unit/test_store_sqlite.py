"""The book's contracts, in an SQLite file and in memory."""

import pytest
from book_factory import START, session
from hypothesis import given, settings
from store_base import HOW
from store_contract import MeasuringContract
from store_decisions import DecidingContract
from store_strategies import measurements

from qa.store import open_book


class InFile:
    @pytest.fixture
    def url(self, tmp_path):
        return f"sqlite:///{tmp_path}/book.sqlite"


class InMemory:
    @pytest.fixture
    def url(self):
        return "sqlite://"


class TestMeasuringInFile(InFile, MeasuringContract):
    pass


class TestDecidingInFile(InFile, DecidingContract):
    pass


class TestMeasuringInMemory(InMemory, MeasuringContract):
    pass


class TestDecidingInMemory(InMemory, DecidingContract):
    pass


@settings(max_examples=20)
@given(measured=measurements)
def test_a_measurement_comes_back_as_it_was_and_the_audit_is_content(measured):
    one = session("North bay", "Plate A", START)
    with open_book("sqlite://") as book:
        generation = book.record(one, measured, **HOW)
        assert book.measurement(one.run, generation) == measured
        assert book.evidence(one.run, generation) == (measured.curves, measured.pictures)
        assert book.audit() == []
