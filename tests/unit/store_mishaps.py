"""What a book promises when processes die or meet, whichever database it lies in."""

from store_children import all_at_once, kill_often, work

from qa.errors import NoBookError
from qa.store import open_book


class MishapContract:
    """Needs fixtures `url` and `another_url`: the addresses of two empty databases."""

    kills = 10

    def test_killed_at_any_moment_a_rerun_ends_as_an_unbroken_run(self, url, another_url):
        recorded = []
        for _ in kill_often(url, self.kills):
            try:
                with open_book(url, create=False) as book:
                    assert book.audit() == []
                    recorded.append(len(book.runs()))
            except NoBookError:
                recorded.append(0)
        assert recorded == sorted(recorded)
        assert recorded[-1] > 0
        weeks = recorded[-1] + 3
        work(url, "North bay", weeks)
        work(another_url, "North bay", weeks)
        with open_book(url) as book, open_book(another_url) as unbroken:
            assert book.audit() == []
            assert book.anchor() == unbroken.anchor()  # the same entries in the same order, hash by hash
            assert book.readings().equals(unbroken.readings())
            assert book.runs().equals(unbroken.runs())

    def test_processes_recording_at_once_all_succeed(self, url):
        """Two record the same runs, one others; none finds a book there, and each would make it."""
        assert all_at_once(url, ("North bay", "North bay", "South bay"), 12) == [0, 0, 0]
        with open_book(url, create=False) as book:
            runs = book.runs(generation="all")
            assert sorted(runs["scanner"]) == ["North bay"] * 12 + ["South bay"] * 12
            assert set(runs["generation"]) == {1}
            assert list(book.ledger()["kind"]).count("made") == 1
            assert len(book.held()) == 24
            assert book.audit() == []
