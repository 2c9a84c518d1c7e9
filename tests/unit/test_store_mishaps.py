"""Killed processes and several writers, with an SQLite file."""

import pytest
from store_mishaps import MishapContract


class TestMishaps(MishapContract):
    @pytest.fixture
    def url(self, tmp_path):
        return f"sqlite:///{tmp_path}/book.sqlite"

    @pytest.fixture
    def another_url(self, tmp_path):
        return f"sqlite:///{tmp_path}/unbroken.sqlite"
