"""The exact block to paste into site.toml for a scanner or phantom that it does not know yet."""

from __future__ import annotations

import json
from collections.abc import Mapping

SCANNER_KEYS = ("DeviceSerialNumber", "StationName", "ManufacturerModelName", "Manufacturer")
PHANTOM_KEYS = ("PatientID",)


def scanner_block(facts: Mapping[str, str]) -> str:
    """A [[scanner]] table that matches these header facts (the serial number, else what else tells it apart)."""
    chosen = [key for key in SCANNER_KEYS if facts.get(key, "").strip()]
    keys = chosen[:1] if chosen[:1] == ["DeviceSerialNumber"] else chosen
    field_t = _number(facts.get("MagneticFieldStrength", ""))
    shown = f"{field_t:g}" if field_t else "0.0                       # tesla: fill in"
    if field_t and "." not in shown:
        shown += ".0"
    name = facts.get("StationName") or facts.get("ManufacturerModelName") or "New scanner"
    return f"[[scanner]]\nname = {quoted(name)}\nfield_t = {shown}\nmatch = {_match(keys, facts)}"


def phantom_block(facts: Mapping[str, str], plate: str = "plates/….toml") -> str:
    """A [[phantom]] table that matches these header facts; `plate` is the file to name if there is only one."""
    keys = [key for key in PHANTOM_KEYS if facts.get(key, "").strip()]
    name = facts.get("PatientID") or "New phantom"
    return f'[[phantom]]\nname = {quoted(name)}\nserial = ""\nplate = {quoted(plate)}\nmatch = {_match(keys, facts)}'


def schedule_block(scanner: str, phantom: str, recipe: str = "recipes/weekly.toml") -> str:
    """A [[schedule]] table that joins a scanner and a phantom by a recipe."""
    return (
        f"[[schedule]]\nscanner = {quoted(scanner)}\nphantom = {quoted(phantom)}\n"
        f"recipe = {quoted(recipe)}\nevery_days = 7\ngrace_days = 2"
    )


def quoted(text: str) -> str:
    """A TOML basic string: JSON's escapes are a subset of TOML's, but for DEL and lone surrogates."""
    clean = "".join(c for c in text if c.isprintable())
    return json.dumps(clean, ensure_ascii=False)


def _match(keys: list[str], facts: Mapping[str, str]) -> str:
    pairs = ", ".join(f"{key} = {quoted(facts[key].strip())}" for key in keys)
    return (
        f"{{ {pairs} }}"
        if pairs
        else "{ }   # nothing in the header tells it apart: name a DICOM keyword and its value"
    )


def _number(text: str) -> float | None:
    try:
        value = float(text)
    except ValueError:
        return None
    return value if value > 0 else None
