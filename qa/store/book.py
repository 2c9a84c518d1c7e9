"""The book: one open database, with its verbs gathered from the modules beside this one."""

from __future__ import annotations

from types import TracebackType
from typing import Self

from qa.store.audit import Audit
from qa.store.decisions import Decisions
from qa.store.export import Export
from qa.store.frames import Frames
from qa.store.holding import Holding
from qa.store.logbook import Logbook
from qa.store.recording import Recording
from qa.store.tolerances import Tolerances


class Book(Recording, Holding, Frames, Logbook, Tolerances, Decisions, Audit, Export):
    """An open book; use it in a ``with`` statement. `open_book` makes it."""

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Give the connections back; whatever was written is written."""
        self._engine.dispose()
