"""Column types that hold the same value in SQLite and PostgreSQL, and the form a value has once it is stored.

`as_stored` gives a row exactly as the database will give it back, so that a digest taken before writing equals one
taken after reading: no NaN (absent is NULL), no negative zero, UTC, no characters that one of the databases refuses.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from datetime import UTC, date, datetime
from enum import Enum
from math import isfinite
from typing import Any

from sqlalchemy import Boolean, DateTime, Dialect, Double, Integer, LargeBinary, String, Text
from sqlalchemy.types import TypeDecorator

from qa.errors import StoreError


def canonical(value: object) -> str:
    """One text per value: JSON with sorted keys, no spaces, ASCII only, no NaN (RFC 8785 in spirit)."""
    return _ENCODER.encode(plain(value))


def canonical_row(values: Mapping[str, Any]) -> str:
    """The same text as `canonical` gives, faster, for a row as stored: its values are plain but for times."""
    try:
        return _ENCODER.encode(values)
    except ValueError:  # NaN: no row of ours holds one
        return canonical(values)


def plain(value: Any) -> Any:
    """`value` as JSON knows it: dates as ISO 8601, enumerations by value, tuples as lists, NaN and infinities as null.

    Texts are cleaned: what comes out can be written as UTF-8.

    Raises
    ------
    StoreError
        For a value of a kind that cannot be stored.
    """
    kind = type(value)
    if kind is float:  # the commonest kinds first: curves are thousands of numbers
        return value if isfinite(value) else None
    if kind is str:
        return clean(value)
    if value is None or kind is int or kind is bool:
        return value
    if isinstance(value, Enum):
        return plain(value.value)
    if isinstance(value, str):
        return clean(value)
    if isinstance(value, float):
        return float(value) if isfinite(value) else None
    if isinstance(value, int):
        return value
    if isinstance(value, datetime):
        return in_utc(value).isoformat()
    if isinstance(value, date):
        return value.isoformat()
    if isinstance(value, Mapping):
        return {clean(str(key)): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple | set | frozenset):
        items = sorted(value, key=str) if isinstance(value, set | frozenset) else value
        return [plain(item) for item in items]
    if is_dataclass(value) and not isinstance(value, type):
        return {part.name: plain(getattr(value, part.name)) for part in fields(value)}
    if hasattr(value, "item") and getattr(value, "ndim", None) == 0:  # a NumPy scalar
        return plain(value.item())
    if hasattr(value, "tolist"):  # a NumPy array
        return plain(value.tolist())
    raise StoreError(f"a value of type {type(value).__name__} cannot be stored")


_ENCODER = json.JSONEncoder(sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False, default=plain)


def in_utc(when: datetime) -> datetime:
    """`when` in UTC; a time without a zone is an error, never guessed."""
    if when.tzinfo is None:
        raise StoreError(f"the time {when.isoformat()} has no time zone", remedy="Give it one, UTC for instance.")
    return when.astimezone(UTC)


def clean(text: str) -> str:
    """`text` without what a database refuses: NUL and lone surrogates (from undecodable file names) are escaped."""
    if text.isascii() and "\0" not in text:
        return str(text)
    return text.replace("\0", "\\x00").encode("utf-8", "backslashreplace").decode("utf-8")


def number(value: object) -> float | None:
    """A float as both databases keep it: None for NaN and infinities, no negative zero."""
    if value is None:
        return None
    result = float(value)  # type: ignore[arg-type]
    return result + 0.0 if isfinite(result) else None


class Words(TypeDecorator[str]):
    """Text of any length, cleaned on the way in."""

    impl = Text
    cache_ok = True

    def process_bind_param(self, value: str | None, dialect: Dialect) -> str | None:
        return None if value is None else clean(value)


class Utc(TypeDecorator[datetime]):
    """An instant: stored as UTC without a zone (SQLite knows none), given back aware."""

    impl = DateTime
    cache_ok = True

    def process_bind_param(self, value: datetime | None, dialect: Dialect) -> datetime | None:
        return None if value is None else in_utc(value).replace(tzinfo=None)

    def process_result_value(self, value: datetime | None, dialect: Dialect) -> datetime | None:
        return None if value is None else value.replace(tzinfo=UTC)


class Json(TypeDecorator[Any]):
    """A JSON value as canonical text: the same bytes in every database, so that digests agree."""

    impl = Text
    cache_ok = True

    def process_bind_param(self, value: Any, dialect: Dialect) -> str | None:
        return None if value is None else canonical(value)

    def process_result_value(self, value: str | None, dialect: Dialect) -> Any:
        return None if value is None else json.loads(value)


def stored_value(kind: object, value: Any) -> Any:
    """`value` as a column of type `kind` will give it back."""
    if value is None:
        return None
    if isinstance(value, Enum):
        value = value.value
    if isinstance(kind, Words | String):
        return clean(str(value))
    if isinstance(kind, Double):
        return number(value)
    if isinstance(kind, Boolean):
        return bool(value)
    if isinstance(kind, Integer):
        return int(value)
    if isinstance(kind, LargeBinary):
        return bytes(value)
    if isinstance(kind, Utc):
        return in_utc(value)
    if isinstance(kind, Json):
        return plain(value)
    return value
