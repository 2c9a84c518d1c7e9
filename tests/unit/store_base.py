"""What the contracts of a book share: a clock that only tests move, and small things to store."""

from datetime import date, timedelta

import pytest
from book_factory import Clock

from qa.intake.series import FileRecord
from qa.site.limits import LimitBlock
from qa.store import open_book

DAY = timedelta(days=1)
HOW = {"method_fingerprint": "inversion-recovery 1", "reason": "first ingest"}


def file(number, size=1000):
    return FileRecord(f"in/{number}.dcm", f"{number:064x}", size, f"1.2.3.{number}")


def block(since=date(2025, 1, 1), watch=3.0, act=5.0, **more):
    return LimitBlock(since=since, watch_percent=watch, act_percent=act, **more)


class Fixtures:
    """Needs a fixture `url`: the address of an empty database."""

    @pytest.fixture
    def clock(self):
        return Clock()

    @pytest.fixture
    def book(self, url, clock):
        with open_book(url, clock=clock) as book:
            yield book
