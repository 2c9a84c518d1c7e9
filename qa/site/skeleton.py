"""A commented site folder to start from: a copy of `skeleton_files`, with the site's name."""

from __future__ import annotations

from pathlib import Path

from qa.errors import SiteError, UsageError
from qa.site.paste import quoted

TEMPLATES = Path(__file__).resolve().parent / "skeleton_files"


def make_site(folder: Path, name: str | None = None) -> tuple[Path, ...]:
    """Make a site folder; gives the files written.

    Parameters
    ----------
    folder : must not exist, or be empty
    name : of the site; absent: the folder's name

    Raises
    ------
    UsageError
        If the folder holds anything already.
    SiteError
        If it cannot be written.
    """
    folder = Path(folder)
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        remedy = "Name a new folder. Nothing was written."
        raise UsageError("there is something here already", str(folder), remedy)
    title = quoted(name or folder.resolve().name)
    written = []
    try:
        for template in sorted(path for path in TEMPLATES.rglob("*") if path.is_file()):
            target = folder / template.relative_to(TEMPLATES)
            target.parent.mkdir(parents=True, exist_ok=True)
            text = template.read_text(encoding="utf-8").replace('"{name}"', title)
            target.write_text(text, encoding="utf-8")
            written.append(target)
    except OSError as error:
        raise SiteError(f"the site folder cannot be made: {error.strerror or error}", str(folder)) from error
    return tuple(written)
