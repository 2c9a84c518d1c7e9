"""The book's contract, in an SQLite file and in memory."""

import pytest
from store_contract import BookContract


class TestSqliteFile(BookContract):
    @pytest.fixture
    def url(self, tmp_path):
        return f"sqlite:///{tmp_path}/book.sqlite"


class TestSqliteInMemory(BookContract):
    @pytest.fixture
    def url(self):
        return "sqlite://"
