"""Which schema this version of Vialbook speaks: a constant, so that opening a book needs no migration tool."""

from __future__ import annotations

from qa.errors import OldBookError

HEAD = "0001_first"
VERSION_TABLE = "vialbook_revision"  # a name of its own: a database of some other program is not taken for a book


def is_older(stored: str) -> bool:
    """Whether a revision comes before this version's: revisions are named NNNN_what, in order."""
    number = stored.split("_", 1)[0]
    return number.isdecimal() and int(number) < int(HEAD.split("_", 1)[0])


def check_revision(stored: str, where: str) -> None:
    """Whether this version can work with a database of that revision.

    Raises
    ------
    OldBookError
        If not; it says which of the two is older, and what to do.
    """
    if stored == HEAD:
        return
    if is_older(stored):
        what = f"this book was made by an older version of Vialbook (revision {stored}, now {HEAD})"
        if "://" in where:  # a server: Vialbook cannot copy what it does not own
            remedy = "Make a dump first (pg_dump: on a server that is its operator's duty), then run: vialbook migrate."
        else:
            remedy = "Run: vialbook migrate (it copies the database first)."
        raise OldBookError(what, where, remedy)
    what = f"this book was made by a newer version of Vialbook (revision {stored}, here {HEAD})"
    raise OldBookError(what, where, "Use that version or a later one; nothing was changed.")
