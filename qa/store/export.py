"""Export: the book's tables as tidy frames, and as files that other programs read."""

from __future__ import annotations

import json
from collections.abc import Callable
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from qa.errors import StoreError
from qa.store.columns import canonical, plain
from qa.store.desk import Desk

if TYPE_CHECKING:
    from pandas import DataFrame

Format = Literal["csv", "json", "parquet"]
FINDING_COLUMNS = ("finding", "first_raised", "state")  # what every finding has; the trend analysis adds its own
FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")
TABLES = ("readings", "runs", "log", "held", "findings", "rulings", "limits", "ledger")


class Export(Desk):
    """The verb that hands the book to other programs."""

    def table(self, name: str) -> DataFrame:
        """One of TABLES as a frame; readings and runs with all their generations.

        Raises
        ------
        StoreError
            If there is no such table.
        """
        import pandas as pd

        book: Any = self
        makers: dict[str, Callable[[], DataFrame]] = {
            "readings": lambda: book.readings(generation="all"),
            "runs": lambda: book.runs(generation="all"),
            "log": lambda: book.log_entries(),
            "held": lambda: book.held(resolved=True),
            "findings": lambda: pd.DataFrame(book.findings() or {name: [] for name in FINDING_COLUMNS}),
            "rulings": lambda: book.rulings(),
            "limits": lambda: book.limits(),
            "ledger": lambda: book.ledger(),
        }
        if name not in makers:
            raise StoreError(f"there is no table '{name}'", self.where, f"Tables: {', '.join(TABLES)}.")
        return makers[name]()

    def export(self, folder: Path, *, form: Format = "csv", tables: tuple[str, ...] = TABLES) -> tuple[Path, ...]:
        """Write tables as files ``<table>.<form>`` into `folder`; gives their paths.

        Times are ISO 8601 in UTC. In CSV, a text that a spreadsheet would take for a formula gets an apostrophe before
        it (common practice); JSON and Parquet have the bare text.

        Raises
        ------
        StoreError
            If a file cannot be written.
        """
        paths = []
        for name in tables:
            path = Path(folder) / f"{name}.{form}"
            try:
                path.parent.mkdir(parents=True, exist_ok=True)
                _WRITERS[form](self.table(name), path)
            except OSError as error:
                raise StoreError(f"the file cannot be written: {error.strerror or error}", str(path)) from error
            paths.append(path)
        return tuple(paths)


def harmless(text: str) -> str:
    """`text` so that no spreadsheet takes it for a formula; plain numbers stay as they are.

    Signs that start a formula also in their wide forms (some spreadsheets read them so), and what is skipped ahead of
    them; common practice.
    """
    if text[:1] in FORMULA_STARTS and not _is_number(text):
        return f"'{text}"
    return text


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _flat(frame: DataFrame, *, guard: bool) -> DataFrame:
    """Lists and dicts as JSON text, times as ISO 8601 text."""

    def cell(value: Any) -> Any:
        if isinstance(value, list | dict):
            value = json.dumps(json.loads(canonical(value)), ensure_ascii=False, sort_keys=True)
        return harmless(value) if guard and isinstance(value, str) else value

    result = frame.copy()
    for name in result.columns:
        if str(result[name].dtype).startswith("datetime64"):
            result[name] = [None if when is None or when != when else when.isoformat() for when in result[name]]
        elif result[name].dtype == object or str(result[name].dtype) in ("str", "string"):
            result[name] = [cell(value) for value in result[name]]
    return result


def _write_csv(frame: DataFrame, path: Path) -> None:
    _flat(frame, guard=True).to_csv(path, index=False, encoding="utf-8", lineterminator="\r\n")


def _write_json(frame: DataFrame, path: Path) -> None:
    rows = [{key: plain(_absent(value)) for key, value in row.items()} for row in frame.to_dict("records")]
    path.write_text(json.dumps(rows, ensure_ascii=False, indent=1) + "\n", encoding="utf-8")


def _absent(value: Any) -> Any:
    """None for NaN and NaT: they alone differ from themselves."""
    return None if isinstance(value, float | datetime) and value != value else value


def _write_parquet(frame: DataFrame, path: Path) -> None:
    times = {name: frame[name] for name in frame.columns if str(frame[name].dtype).startswith("datetime64")}
    _flat(frame, guard=False).assign(**times).to_parquet(path, index=False)


_WRITERS: dict[str, Callable[[Any, Path], None]] = {"csv": _write_csv, "json": _write_json, "parquet": _write_parquet}
