"""Options that every command shares, and how they become a site."""

from __future__ import annotations

from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from qa.errors import UsageError

if TYPE_CHECKING:
    from qa.site import Site

SiteDir = Annotated[
    Path | None,
    typer.Option(
        "--site",
        metavar="DIR",
        envvar="VIALBOOK_SITE",
        show_envvar=False,
        help="Site folder (default: $VIALBOOK_SITE, else the current folder).",
    ),
]
AsJson = Annotated[bool, typer.Option("--json", help="One JSON document on stdout, messages on stderr.")]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="No progress and no messages but errors.")]


def open_site(folder: Path | None) -> Site:
    """The site of ``--site``, else of the current folder."""
    from qa.site import load_site

    return load_site(folder or Path.cwd())


def day_of(text: str | None, option: str) -> date | None:
    """A date written as 2026-03-31."""
    if text is None:
        return None
    try:
        return date.fromisoformat(text)
    except ValueError:
        raise UsageError(f"{option} '{text}' is not a date", remedy="Write it as 2026-03-31.") from None


def today_of(text: str | None, site: Site) -> date:
    """The day that was given, else today in the site's time zone."""
    from datetime import datetime

    return day_of(text, "--today") or datetime.now(site.timezone).date()


def known_name(kind: str, name: str | None, names: list[str]) -> str | None:
    """`name` if the site knows it; upper and lower case are alike."""
    if name is None:
        return None
    for known in names:
        if known.casefold() == name.strip().casefold():
            return known
    raise UsageError(f"site.toml has no {kind} '{name}'", remedy=f"Known: {', '.join(names) or 'none'}.")
