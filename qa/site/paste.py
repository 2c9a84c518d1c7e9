"""The exact block to paste into site.toml for a scanner or phantom that it does not know yet."""

from __future__ import annotations

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
    names = (facts.get(key, "").strip() for key in ("StationName", "ManufacturerModelName"))
    name = next(filter(None, names), "New scanner")
    return f"[[scanner]]\nname = {quoted(name)}\nfield_t = {shown}\nmatch = {_match(keys, facts)}"


def phantom_block(facts: Mapping[str, str], plate: str = "plates/….toml") -> str:
    """A [[phantom]] table that matches these header facts; `plate` is the file to name if there is only one."""
    keys = [key for key in PHANTOM_KEYS if facts.get(key, "").strip()]
    name = facts.get("PatientID", "").strip() or "New phantom"
    return f'[[phantom]]\nname = {quoted(name)}\nserial = ""\nplate = {quoted(plate)}\nmatch = {_match(keys, facts)}'


def schedule_block(scanner: str, phantom: str, recipe: str = "recipes/weekly.toml") -> str:
    """A [[schedule]] table that joins a scanner and a phantom by a recipe."""
    return (
        f"[[schedule]]\nscanner = {quoted(scanner)}\nphantom = {quoted(phantom)}\n"
        f"recipe = {quoted(recipe)}\nevery_days = 7\ngrace_days = 2"
    )


def quoted(text: str) -> str:
    """A TOML basic string that reads back as `text`; what does not print is escaped, lone surrogates are left out."""
    return '"' + "".join(_shown(character) for character in text) + '"'


def _shown(character: str) -> str:
    code = ord(character)
    if 0xD800 <= code <= 0xDFFF:
        return ""
    if character in ('"', "\\"):
        return f"\\{character}"
    if character.isprintable():
        return character
    return f"\\u{code:04x}" if code <= 0xFFFF else f"\\U{code:08x}"


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
