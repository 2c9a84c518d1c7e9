"""TOML with good manners: what is wrong with a file is said with its line and, for a misspelt key, the nearest one."""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

from qa.errors import SiteError

Model = TypeVar("Model", bound=BaseModel)
_HEADER = re.compile(r"^\s*\[\[?\s*([A-Za-z0-9_.\-\"']+)\s*\]\]?\s*(?:#.*)?$")
_KEY = re.compile(r"^\s*([A-Za-z0-9_\-]+|\"[^\"]*\"|'[^']*')\s*(?:\.[^=]*)?=")


@dataclass(frozen=True, slots=True)
class Lines:
    """Which line each table and key of a TOML file stands on: ``at[(table, index, key)]``, key "" for the header."""

    at: Mapping[tuple[str, int, str], int]

    @classmethod
    def of(cls, text: str) -> Lines:
        """Read the positions off the text; strings over several lines may hide a key, never invent an error."""
        at: dict[tuple[str, int, str], int] = {}
        count: dict[str, int] = {}
        table = ""
        at["", 0, ""] = 1
        for number, line in enumerate(text.splitlines(), start=1):
            if header := _HEADER.match(line):
                table = header[1].strip("\"'")
                count[table] = count.get(table, -1) + 1
                at[table, count[table], ""] = number
            elif key := _KEY.match(line):
                at.setdefault((table, count.get(table, 0), key[1].strip("\"'")), number)
        return cls(at)

    def find(self, table: str, index: int, key: str = "") -> int | None:
        """The key's line, else its table's, else None."""
        return self.at.get((table, index, key)) or self.at.get((table, index, ""))


@dataclass(slots=True)
class TomlFile:
    """One file the user wrote, read as tables, gathering complaints until `check` raises them all at once."""

    path: Path
    data: dict[str, Any]
    lines: Lines
    complaints: list[str] = field(default_factory=list)

    @classmethod
    def read(cls, path: Path, remedy: str = "") -> TomlFile:
        """Raises SiteError if the file is missing, unreadable, or not TOML (with the line)."""
        try:
            text = path.read_bytes().decode("utf-8-sig")
        except FileNotFoundError as error:
            raise SiteError("there is no such file", str(path), remedy) from error
        except UnicodeDecodeError as error:
            raise SiteError("is not UTF-8 text", str(path), "Save it as UTF-8 in your editor.") from error
        except OSError as error:
            raise SiteError(f"cannot be read: {error.strerror}", str(path)) from error
        try:
            data = tomllib.loads(text)
        except tomllib.TOMLDecodeError as error:
            raise SiteError(
                f"is not valid TOML: {error}", str(path), "Mend that line and run the command again."
            ) from error
        return cls(path, data, Lines.of(text))

    def complain(self, what: str, table: str = "", index: int = 0, key: str = "") -> None:
        """Note something wrong, with the line of the key or its table."""
        line = self.lines.find(table, index, key)
        self.complaints.append(f"line {line}: {what}" if line else what)

    def known_tables(self, *names: str) -> None:
        """Complain about tables or top-level keys that this kind of file does not have."""
        for name in self.data:
            if name not in names:
                self.complain(
                    f"unknown {_kind(self.data[name])} '{name}'{nearest(name, names)}",
                    name if isinstance(self.data[name], (dict, list)) else "",
                    0,
                    name,
                )

    def one(self, name: str, model: type[Model], *, rename: Mapping[str, str] | None = None) -> Model | None:
        """The table [name] as a model; None (with a complaint) where it is missing or wrong."""
        value = self.data.get(name)
        if value is None:
            self.complain(f"the table [{name}] is missing")
            return None
        if not isinstance(value, dict):
            self.complain(f"'{name}' must be a table: write [{name}] on a line of its own", name, 0, name)
            return None
        return self.validated(name, 0, value, model, rename or {})

    def many(self, name: str, model: type[Model], *, rename: Mapping[str, str] | None = None) -> list[Model]:
        """All tables [[name]] as models; wrong ones are complained about and left out."""
        value = self.data.get(name, [])
        if not isinstance(value, list) or not all(isinstance(item, dict) for item in value):
            self.complain(f"write [[{name}]] with double brackets: there may be several", name, 0)
            return []
        made = [self.validated(name, index, item, model, rename or {}) for index, item in enumerate(value)]
        return [item for item in made if item is not None]

    def validated(
        self, table: str, index: int, values: dict[str, Any], model: type[Model], rename: Mapping[str, str]
    ) -> Model | None:
        """One table through its model; each thing wrong becomes a sentence with a line."""
        try:
            return model.model_validate(values)
        except ValidationError as error:
            fields = list(model.model_fields)
            for item in error.errors(include_url=False):
                where = [str(part) for part in item["loc"]]
                key = where[0] if where else ""
                self.complain(_sentence(item, table, where, fields), table, index, key)
            return None

    def check(self, remedy: str = "Mend the file and run the command again.") -> None:
        """Raise SiteError with every complaint so far, one a line."""
        if self.complaints:
            raise SiteError("\n  ".join(self.complaints), str(self.path), remedy)


def nearest(word: str, known: tuple[str, ...] | list[str]) -> str:
    """``; did you mean 'radius_mm'?`` or, where nothing is near, what there is."""
    close = difflib.get_close_matches(word, known, n=3, cutoff=0.5)
    close.sort(key=lambda one: sorted(one) != sorted(word))  # swapped letters are the likeliest slip
    return f"; did you mean '{close[0]}'?" if close else f"; known here: {', '.join(known)}"


def _kind(value: object) -> str:
    return "table" if isinstance(value, (dict, list)) else "key"


def _sentence(item: Any, table: str, where: list[str], fields: list[str]) -> str:
    """pydantic's complaint in a user's words."""
    key = ".".join(where)
    kind, given, context = item["type"], item.get("input"), item.get("ctx") or {}
    if kind == "extra_forbidden":
        return f"unknown key '{key}' in [{table}]{nearest(where[-1], fields)}"
    if kind == "missing":
        return f"the key '{key}' is missing in [{table}]"
    if kind == "value_error":
        return f"[{table}]{' ' + key if key else ''}: {context.get('error', item['msg'])}"
    if kind in {"enum", "literal_error"}:
        expected = str(context.get("expected", ""))
        near = nearest(str(given), re.findall(r"'([^']*)'", expected))
        return f"'{key}' in [{table}] is {given!r}; it must be {expected}{near if 'mean' in near else ''}"
    if kind in {"tuple_type", "list_type"}:
        return f"'{key}' in [{table}] is {given!r}: write a list in square brackets"
    if kind == "dict_type":
        return f"'{key}' in [{table}] is {given!r}: write a table in curly brackets"
    if kind in {"too_short", "string_too_short"}:
        return f"'{key}' in [{table}] is too short or empty ({item['msg'].lower()})"
    return f"'{key}' in [{table}] is {given!r}: {item['msg'][0].lower() + item['msg'][1:]}"
