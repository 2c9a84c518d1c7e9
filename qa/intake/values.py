"""Reading single values out of a DICOM dataset, wherever the classic and the enhanced object keep them."""

from __future__ import annotations

from collections.abc import Sequence
from math import isfinite
from typing import Any

from pydicom.datadict import tag_for_keyword
from pydicom.dataset import Dataset

NAN = float("nan")


def number(value: Any) -> float:
    """A DS, IS or FD value as a float: the first of several; NaN for an absent, empty or unreadable one."""
    if value is None:
        return NAN
    if isinstance(value, (list, tuple)) or (hasattr(value, "__len__") and not isinstance(value, (str, bytes))):
        value = value[0] if len(value) else None
    try:
        found = float(str(value).strip()) if not isinstance(value, float) else value
    except ValueError:
        return NAN
    return found if isfinite(found) else NAN


def numbers(value: Any, count: int) -> tuple[float, ...] | None:
    """Exactly `count` finite numbers, or None."""
    try:
        found = tuple(number(item) for item in value)
    except TypeError:
        return None
    return found if len(found) == count and all(isfinite(item) for item in found) else None


def text(value: Any) -> str:
    """A value as one line of text; several joined by a backslash, as DICOM writes them."""
    if value is None:
        return ""
    if isinstance(value, bytes):
        return value.decode("ascii", "replace").strip("\0 ")
    if isinstance(value, Sequence) and not isinstance(value, str):
        return "\\".join(text(item) for item in value)
    return str(value).strip("\0 ")


def groups_of(dataset: Dataset, frame: int) -> list[Dataset]:
    """The functional groups that speak of one frame, its own before the shared ones (PS3.3 C.7.6.16)."""
    found = []
    per_frame = dataset.get("PerFrameFunctionalGroupsSequence")
    if per_frame is not None and frame < len(per_frame):
        found.append(per_frame[frame])
    shared = dataset.get("SharedFunctionalGroupsSequence")
    if shared:
        found.append(shared[0])
    return found


def grouped(groups: Sequence[Dataset], macro: str, keyword: str) -> Any:
    """The value of `keyword` in the macro's sequence, from the first group that has it."""
    for group in groups:
        items = group.get(macro)
        if items:
            value = items[0].get(keyword)
            if value is not None:
                return value
    return None


def anywhere(dataset: Dataset, keyword: str) -> str:
    """The value of a keyword as text: at the top level, else in the functional groups of the first frame."""
    if tag_for_keyword(keyword) is None:
        return ""
    value = dataset.get(keyword)
    if value is None and "SharedFunctionalGroupsSequence" in dataset:
        for group in groups_of(dataset, 0):
            for element in group:
                if element.VR == "SQ" and element.value:
                    value = element.value[0].get(keyword)
                    if value is not None:
                        return text(value)
    return text(value)
