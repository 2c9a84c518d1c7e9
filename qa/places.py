"""Finds the folders that ship beside the code, `migrations` and `reports`.

In a wheel they lie inside the package; in a clone or an editable install beside it. Looking in
both places, the package first, always gives the fresh one.
"""

from __future__ import annotations

from pathlib import Path

from qa.errors import VialbookError

_PACKAGE = Path(__file__).resolve().parent


def shipped(name: str) -> Path:
    """The folder `name` that ships with this version.

    Raises
    ------
    VialbookError
        If the installation is incomplete.
    """
    for candidate in (_PACKAGE / name, _PACKAGE.parent / name):
        if candidate.is_dir():
            return candidate
    what = f"the folder '{name}' is missing from this installation"
    raise VialbookError(what, str(_PACKAGE), "Install Vialbook again.")
