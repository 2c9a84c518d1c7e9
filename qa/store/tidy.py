"""Query results as tidy data frames: the same columns and types whether there are rows or none."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from datetime import UTC, datetime
from typing import Any

import numpy as np
import pandas as pd
from sqlalchemy import Boolean, ColumnElement, Double, Integer

from qa.store.columns import Utc


def frame(
    columns: Sequence[ColumnElement[Any]], rows: Iterable[Sequence[Any]], names: Sequence[str] = ()
) -> pd.DataFrame:
    """A frame of `rows`: floats with NaN for NULL, instants as datetime64[ns, UTC], text and lists as objects.

    Parameters
    ----------
    columns : of the tables, in the order of the values in each row
    names : of the frame's columns, where they differ from the tables'
    """
    data = list(zip(*rows, strict=True)) or [()] * len(columns)
    titles = list(names) or [str(column.key) for column in columns]
    return pd.DataFrame(
        {
            title: _kept(series(column.type, data[index]))
            for index, (title, column) in enumerate(zip(titles, columns, strict=True))
        }
    )


def _kept(values: Any) -> Any:
    """Objects stay objects: pandas would turn texts into its own kind of text, and None into NaN."""
    return pd.Series(values, dtype=object) if str(getattr(values, "dtype", "")) == "object" else values


def series(kind: object, values: Sequence[Any]) -> Any:
    """One column's values as an array or index of the right type; with NULL, integers and booleans become objects."""
    if isinstance(kind, Double):
        return np.array(values, dtype=np.float64)
    if isinstance(kind, Utc):
        return instants(values)
    if isinstance(kind, Integer) and None not in values:
        return np.array(values, dtype=np.int64)
    if isinstance(kind, Boolean) and None not in values:
        return np.array(values, dtype=bool)
    return objects(values)


def objects(values: Sequence[Any]) -> Any:
    """Any values as a one-dimensional object array (lists stay lists)."""
    result = np.empty(len(values), dtype=object)
    result[:] = values
    return result


def instants(values: Sequence[datetime | None]) -> pd.DatetimeIndex:
    """Aware datetimes as datetime64[ns, UTC]; None is NaT."""
    naive = [np.datetime64("NaT") if when is None else np.datetime64(_utc(when), "ns") for when in values]
    return pd.DatetimeIndex(np.array(naive, dtype="datetime64[ns]")).tz_localize("UTC")


def _utc(when: datetime) -> datetime:
    return when.astimezone(UTC).replace(tzinfo=None)
