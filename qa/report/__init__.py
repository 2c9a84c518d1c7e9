"""Report room: the pages.

Enters: an open book, the site, a day. Leaves: HTML pages that open from a file share with no network (`write_pages`).
Knows nothing of DICOM or of how anything was computed: it shows what the book holds and what `qa.answers` says.

One module per page (`front`, `runs`, `scanners`, `comparing`, `history`) turns results into plain texts and figures;
the templates in `reports/` lay them out and do nothing else. `figures` makes Plotly figures as plain dicts.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOMES = {"write_pages": "pages"}
__all__ = sorted(_HOMES)


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(f"qa.report.{_HOMES[name]}"), name)
    raise AttributeError(f"module 'qa.report' has no attribute '{name}'")
