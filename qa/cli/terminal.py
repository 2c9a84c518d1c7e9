"""What the commands say, and where: results on stdout, messages and progress on stderr."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from qa.words import Verdict

Progress = Callable[[str, int, int], None]
MARKS = {"steady": "  ", "watch": "! ", "act": "!!", "void": "? ", "held": "? "}  # shapes, so that colour is not needed
_STYLES = {"steady": "", "watch": "bold", "act": "bold reverse", "void": "bold"}


class Terminal:
    """The voice of one command."""

    def __init__(self, as_json: bool = False, quiet: bool = False) -> None:
        self.as_json, self.quiet = as_json, quiet

    def say(self, text: str) -> None:
        """A message, on stderr."""
        if not self.quiet:
            print(printable(text), file=sys.stderr)

    def line(self, text: str = "") -> None:
        """A line of the result, on stdout; absent with ``--json``, whose document says it all."""
        if not self.as_json:
            print(printable(text))

    def result(self, document: Mapping[str, Any]) -> None:
        """The whole result as one JSON document, if that was asked for."""
        if self.as_json:
            print_document(document)

    def table(self, titles: Sequence[str], rows: Sequence[Sequence[str]], *, verdict: int | None = None) -> None:
        """A table of texts on stdout; `verdict` is the column that holds verdicts. Numbers stand to the right."""
        if self.as_json or not rows:
            return
        from rich import box
        from rich.console import Console
        from rich.table import Table
        from rich.text import Text

        made = Table(box=box.SIMPLE_HEAD, pad_edge=False, header_style="bold")
        for number, title in enumerate(titles):
            column = [row[number] for row in rows]
            right = all(text[:1] in "+-−0123456789–" or not text for text in column)
            made.add_column(title, justify="right" if right else "left", overflow="fold")
        for row in rows:
            cells = [Text(printable(text)) for text in row]
            if verdict is not None:
                cells[verdict] = marked(row[verdict])
            made.add_row(*cells)
        console = Console(width=None if sys.stdout.isatty() else 160)
        console.print(made)

    @contextmanager
    def progress(self) -> Iterator[Progress | None]:
        """A progress bar on stderr, one line per kind of work; None when quiet."""
        if self.quiet:
            yield None
            return
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

        tasks: dict[str, Any] = {}
        columns = (TextColumn("{task.description:<16}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
        with Progress(*columns, console=Console(stderr=True)) as bar:

            def tell(doing: str, done: int, total: int) -> None:
                if doing not in tasks:
                    tasks[doing] = bar.add_task(doing, total=total)
                bar.update(tasks[doing], completed=done, total=total)

            yield tell


def marked(verdict: str) -> Any:
    """A verdict with its mark, as rich text."""
    from rich.text import Text

    return Text(f"{MARKS.get(verdict, '  ')} {verdict}", style=_STYLES.get(verdict, ""))


def attention(verdict: Verdict | str, text: str) -> str:
    """One line about something that needs attention."""
    return f"{MARKS.get(str(verdict), '  ')} {verdict}: {text}"


def printable(text: str) -> str:
    """`text` without characters that could steer a terminal (they may come from a file); line ends stay."""
    return "".join(c if c.isprintable() or c == "\n" else "\N{REPLACEMENT CHARACTER}" for c in text)


def print_document(document: Mapping[str, Any]) -> None:
    """One JSON document on stdout."""
    print(json.dumps(document, ensure_ascii=False, indent=1, allow_nan=False))


def complain(text: str) -> None:
    """An error, on stderr."""
    print(printable(text), file=sys.stderr)
