"""Reading single values out of a DICOM dataset, wherever the classic and the enhanced object keep them.

Elements are decoded here from their bytes as they stand in the file, where that is plain: a header has some hundred, of
which a few dozen are wanted, and pydicom's own conversion of each costs more than all the rest of taking a file in.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence
from functools import cache
from math import isfinite
from typing import Any

from pydicom.datadict import dictionary_VR, tag_for_keyword
from pydicom.dataelem import RawDataElement
from pydicom.dataset import Dataset
from pydicom.tag import BaseTag, Tag

NAN = float("nan")
_TEXT = frozenset(
    ("AE", "AS", "CS", "DA", "DS", "DT", "IS", "LO", "LT", "PN", "SH", "ST", "TM", "UC", "UI", "UR", "UT")
)
_PACKED = {"US": "H", "SS": "h", "UL": "L", "SL": "l", "FL": "f", "FD": "d"}  # PS3.5 6.2


def value_of(holder: Dataset, keyword: str) -> Any:
    """The value of an element; None where it is not there.

    Texts come as one string, several values joined by a backslash as in the file; numbers as one or a tuple; sequences
    and all else as pydicom gives them.
    """
    tag, vr = _known(keyword)
    if tag is None:
        return None
    element: Any = holder.get_item(tag)
    if element is None or not isinstance(element, RawDataElement):
        return None if element is None else element.value
    if not element.value:
        return holder[tag].value
    vr = element.VR if element.VR and element.VR != "UN" else vr
    try:
        if vr in _TEXT:
            return element.value.decode("ascii")
        if vr in _PACKED:
            size = struct.calcsize("<" + _PACKED[vr])
            order = "<" if element.is_little_endian else ">"
            found = struct.unpack(f"{order}{len(element.value) // size}{_PACKED[vr]}", element.value)
            return found[0] if len(found) == 1 else found
    except (UnicodeDecodeError, struct.error):
        pass  # another character set, or a wrong length: pydicom decides
    return holder[tag].value


@cache
def _known(keyword: str) -> tuple[BaseTag | None, str]:
    """Tag and value representation by the dictionary."""
    tag = tag_for_keyword(keyword)
    return (None, "") if tag is None else (Tag(tag), dictionary_VR(tag).split(" ")[0])


def number(value: Any) -> float:
    """A DS, IS or FD value as a float: the first of several; NaN for an absent, empty or unreadable one."""
    if isinstance(value, str):
        value = value.partition("\\")[0].strip(" \0")
    elif value is None:
        return NAN
    elif not isinstance(value, (int, float, bytes)) and hasattr(value, "__len__"):
        value = value[0] if len(value) else None
    try:
        found = float(value if isinstance(value, (int, float, str)) else str(value).strip())
    except (ValueError, OverflowError):
        return NAN
    return found if isfinite(found) else NAN


def numbers(value: Any, count: int) -> tuple[float, ...] | None:
    """Exactly `count` finite numbers, or None."""
    try:
        found = tuple(number(item) for item in listed(value))
    except TypeError:
        return None
    return found if len(found) == count and all(isfinite(item) for item in found) else None


def listed(value: Any) -> list[Any]:
    """All of several values; one alone, or a text with backslashes, as a list."""
    if value is None:
        return []
    if isinstance(value, str):
        return value.split("\\")
    return list(value) if hasattr(value, "__iter__") else [value]


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
    per_frame = value_of(dataset, "PerFrameFunctionalGroupsSequence")
    if per_frame is not None and frame < len(per_frame):
        found.append(per_frame[frame])
    shared = value_of(dataset, "SharedFunctionalGroupsSequence")
    if shared:
        found.append(shared[0])
    return found


def grouped(groups: Sequence[Dataset], macro: str, keyword: str) -> Any:
    """The value of `keyword` in the macro's sequence, from the first group that has it."""
    for group in groups:
        items = value_of(group, macro)
        if items:
            value = value_of(items[0], keyword)
            if value is not None:
                return value
    return None


def places_of(dataset: Dataset) -> list[Dataset]:
    """Where facts about a whole file may stand: the top level, then the functional groups of its first frame."""
    found = [dataset]
    for group in groups_of(dataset, 0):
        items = [element.value for element in group if element.VR == "SQ"]
        found += [item[0] for item in items if item]
    return found


def anywhere(places: Sequence[Dataset], keyword: str) -> str:
    """The value of a keyword as text, from the first of the places that has it."""
    return next((text(value) for place in places if (value := value_of(place, keyword)) is not None), "")
