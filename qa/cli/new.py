"""vialbook new: a commented site folder to start from."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from qa.cli.options import AsJson, Quiet
from qa.cli.terminal import Terminal


def new(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="The folder to make; it must be new or empty.")],
    name: Annotated[str | None, typer.Option("--name", help="The site's name (default: the folder's).")] = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Make a commented site folder: site.toml, a plate, a recipe, limits, temperatures."""
    from qa.documents import document
    from qa.site.skeleton import make_site

    terminal = Terminal(as_json, quiet)
    files = make_site(folder, name)
    for file in files:
        terminal.line(str(file))
    terminal.say(
        f"\nNext: describe your scanners, phantoms and plate in these files, then\n"
        f"    vialbook ingest --site {folder} PATH_OF_DICOM\n"
        "Files of a scanner or phantom that site.toml does not know are held, with the block to paste."
    )
    terminal.result(document(folder=folder.resolve(), files=files))
