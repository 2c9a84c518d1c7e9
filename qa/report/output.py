"""From a template to a file: escaping, the parts that all pages share, and writing that is never half done."""

from __future__ import annotations

import hashlib
import json
import os
import re
from collections.abc import Mapping
from contextlib import suppress
from functools import cached_property
from importlib.util import find_spec
from pathlib import Path
from typing import Any

from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup

from qa import __version__
from qa.errors import ReportError
from qa.places import shipped

SHARED = ("style.css", "charts.js")
PLOTLY = "plotly.min.js"


class Output:
    """One folder of pages. `single`: each page carries style, script and Plotly itself, and links nowhere."""

    def __init__(self, folder: Path, *, single: bool = False) -> None:
        self.folder, self.single = Path(folder), single
        self.written: list[Path] = []

    @cached_property
    def _templates(self) -> Environment:
        made = Environment(
            loader=FileSystemLoader(shipped("reports")),
            autoescape=True,
            undefined=StrictUndefined,
            trim_blocks=True,
            lstrip_blocks=True,
        )
        made.globals |= {"embedded": embedded, "version": __version__, "asset": self._asset, "single": self.single}
        made.filters |= {"slug": slug}
        return made

    def write(self, name: str, template: str, content: Mapping[str, Any]) -> Path:
        """Render one page; `name` is its path in the folder. Its links are relative to it."""
        depth = name.count("/")
        page = self._templates.get_template(template).render(up="../" * depth, page=name, **content)
        return self._put(name, page.encode("utf-8", errors="replace"))

    def share(self) -> None:
        """Put style, script and Plotly beside the pages, unless each page carries them itself."""
        if self.single:
            return
        for name in SHARED:
            self._put(name, (shipped("reports") / name).read_bytes())
        source, target = plotly_script(), self.folder / PLOTLY
        if not target.exists() or target.stat().st_size != source.stat().st_size:
            self._put(PLOTLY, source.read_bytes())

    def _asset(self, name: str) -> Markup:
        """The text of a shared file, to stand inside the page."""
        path = plotly_script() if name == PLOTLY else shipped("reports") / name
        text = path.read_text(encoding="utf-8")
        return Markup(re.sub(r"</(script|style)", r"<\\/\1", text, flags=re.IGNORECASE))

    def _put(self, name: str, content: bytes) -> Path:
        target = self.folder / name
        spare = target.with_name(f".{target.name}.{os.getpid()}")
        try:
            target.parent.mkdir(parents=True, exist_ok=True)
            spare.write_bytes(content)
            spare.replace(target)
        except OSError as error:
            with suppress(OSError):
                spare.unlink(missing_ok=True)
            what = f"a page cannot be written: {error.strerror or error}"
            raise ReportError(what, str(target), "Free the disk or give another folder with --out.") from error
        self.written.append(target)
        return target


def embedded(value: Any) -> Markup:
    """`value` as JSON that may stand inside a script element: nothing in it can end the element."""
    text = json.dumps(value, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    for character in "<>&\u2028\u2029":
        text = text.replace(character, f"\\u{ord(character):04x}")
    return Markup(text)


def slug(name: str) -> str:
    """A file name for a scanner: letters and digits of its name, and a digest, so that no two are alike."""
    plain = re.sub(r"[^a-z0-9]+", "-", name.casefold()).strip("-")[:40]
    return f"{plain or 'scanner'}-{hashlib.sha256(name.encode('utf-8', 'replace')).hexdigest()[:6]}"


def plotly_script() -> Path:
    """Plotly's script, as its package ships it.

    Raises
    ------
    ReportError
        If the package is not installed whole.
    """
    spec = find_spec("plotly")
    places = list(spec.submodule_search_locations or ()) if spec else []
    for place in places:
        path = Path(place) / "package_data" / PLOTLY
        if path.is_file():
            return path
    raise ReportError("Plotly's script is missing from this installation", remedy="Install Vialbook again.")
