"""A text that a regular expression of a recipe accepts, so that simulated series are matched by it."""

from __future__ import annotations

import re

from qa.errors import SiteError

_INNERMOST = re.compile(r"(?<!\\)\((?:\?:)?([^()|]*)(?:\|[^()]*)?\)")


def accepted(pattern: str, tail: str = "") -> str:
    """A readable text that `pattern` matches in full, with `tail` if the pattern lets it.

    Raises
    ------
    SiteError
        If no simple text is found; recipes for simulation want plain patterns such as ``"IR.*"``.
    """
    alternative = re.split(r"(?<!\\)\|", _without_groups(pattern.removeprefix("(?i)")))[0].strip("^$")
    plain = re.sub(r"\\[sS][*+]?|\[[ _-]+\][*+?]?", " ", alternative)
    plain = re.sub(r"\\d[*+]?|\[0-9\][*+]?", "1", plain)
    plain = re.sub(r"\\b|\.\*|\.\+|\.\?|(?<=\w)\?", "", plain)
    plain = re.sub(r"\\(.)", r"\1", plain)
    bare = re.sub(r"[()^$?*+]", "", plain)
    for text in (plain, bare, pattern):
        for whole in (f"{text} {tail}".strip(), f"{text}{tail}", text, f"x {text} x"):
            if whole and re.fullmatch(pattern, whole):
                return whole
    for text in (plain, bare):
        for whole in (f"{text} {tail}".strip(), text):
            if whole and re.search(pattern, whole):
                return whole
    raise SiteError(
        f"the simulator cannot think of a text that matches '{pattern}'",
        remedy="Use a plain pattern in the recipe, such as 'IR.*'.",
    )


def _without_groups(pattern: str) -> str:
    """The pattern with each group replaced by its first alternative, from the inside out."""
    while (shorter := _INNERMOST.sub(r"\1", pattern)) != pattern:
        pattern = shorter
    return pattern
