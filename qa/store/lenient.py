"""Reading rows in which somebody may have written anything: an audit names such a row instead of failing at it."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from typing import Any

from sqlalchemy import Boolean, Connection, Date, Text, select, type_coerce

from qa.store.columns import Json, Utc
from qa.store.models import Base

Row = dict[str, Any]
AT_ONCE = 500  # rows: pictures and curves of many years need not fit into memory


def rows_of(connection: Connection, table: type[Base], order: str = "") -> Iterator[Row]:
    """All rows of a table, a few hundred at a time, as they were stored.

    A value that is not of its column's kind (a time that is no time, JSON that is none) comes as the text
    ``unreadable: …``, so that no digest of it can agree.

    Parameters
    ----------
    order : the column to sort by
    """
    columns = table.__table__.columns
    readers: dict[str, Callable[[Any], Any]] = {}
    for column in columns:
        if isinstance(column.type, Utc | Json | Date | Boolean):  # the others are stored as what they are
            reader = column.type.dialect_impl(connection.dialect).result_processor(connection.dialect, None)
            if reader is not None:
                readers[column.name] = reader
    query = select(*(type_coerce(column, Text).label(column.name) for column in columns))
    if order:
        query = query.order_by(columns[order])
    for found in connection.execute(query, execution_options={"yield_per": AT_ONCE}).mappings():
        row: Row = dict(found)
        for name, read in readers.items():
            row[name] = _attempt(read, row[name])
        yield row


def told(payload: object) -> dict[str, Any]:
    """What a ledger entry tells, as far as it can be read: its hash says whether it was changed."""
    try:
        read = json.loads(payload) if isinstance(payload, str) else None
    except ValueError:
        return {}
    return read if isinstance(read, dict) else {}


def _attempt(read: Callable[[Any], Any], value: Any) -> Any:
    try:
        return read(value)
    except (ValueError, TypeError, AttributeError):
        return f"unreadable: {value!r}"
