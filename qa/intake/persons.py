"""What in a file may belong to a person: noticed, and blanked before the file is kept."""

from __future__ import annotations

import re
from typing import Any

from pydicom.datadict import tag_for_keyword
from pydicom.dataelem import RawDataElement
from pydicom.dataset import Dataset

from qa.intake.values import text, value_of

_NAME = "PatientName"
_OTHERS = (
    "PatientBirthDate",
    "PatientBirthName",
    "PatientMotherBirthName",
    "PatientAddress",
    "PatientTelephoneNumbers",
    "PatientComments",
    "OtherPatientNames",
    "OtherPatientIDs",
    "OtherPatientIDsSequence",
    "ResponsiblePerson",
    "MilitaryRank",
)
_OF_A_PHANTOM = re.compile(r"\b(phantom\w*|qa|qc|test)\b", re.IGNORECASE)


def personal_keywords(dataset: Dataset) -> list[str]:
    """Which elements that belong to a person are filled: a name that is not a phantom's, a birth date…"""
    name = text(value_of(dataset, _NAME)).replace("^", " ").strip()
    own = {text(value_of(dataset, k)).strip().lower() for k in ("PatientID", "DeviceSerialNumber", "StudyID")}
    named = bool(name) and name.lower() not in own and not _OF_A_PHANTOM.search(name)
    return [_NAME] * named + [keyword for keyword in _OTHERS if filled(dataset, keyword)]


def filled(dataset: Dataset, keyword: str) -> bool:
    """Whether an element holds more than blanks."""
    value = value_of(dataset, keyword)
    return bool(value.strip(" \0") if isinstance(value, str) else value)


def blanked(content: bytes, dataset: Dataset) -> bytes | None:
    """The file with its personal elements filled with spaces, all else to the byte as it was.

    Parameters
    ----------
    content : the file
    dataset : the same, parsed, its elements not looked at yet (they still know their place in the file)

    Returns
    -------
    bytes or None
        None where that cannot be done in place: in a deflated file, or in a sequence.
    """
    out = bytearray(content)
    places: dict[str, RawDataElement] = {}
    for keyword in (_NAME, *_OTHERS):
        element: Any = dataset.get_item(tag_for_keyword(keyword) or 0)  # pydicom's own types leave out raw ones
        if isinstance(element, RawDataElement):
            places[keyword] = element
    for keyword in personal_keywords(dataset):
        raw = places.get(keyword)
        if raw is None or not raw.value or keyword.endswith("Sequence"):
            return None
        end = raw.value_tell + len(raw.value)
        if out[raw.value_tell : end] != raw.value:
            return None
        out[raw.value_tell : end] = b" " * len(raw.value)
    return bytes(out)
