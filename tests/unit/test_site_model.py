"""Who is who: header facts against `match`, and the blocks to paste for what a site does not know."""

import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from intake_site import make_site

from qa.errors import UsageError
from qa.site import Plate, Reference, Vial, load_site
from qa.site.model import agrees
from qa.site.paste import phantom_block, quoted, scanner_block, schedule_block
from qa.site.skeleton import make_site as make_skeleton
from qa.words import Quantity

header_text = st.text(st.characters(codec="utf-8"), max_size=20)


@pytest.mark.parametrize(
    ("wanted", "found", "agreed"),
    [
        ("SIM-1", "SIM-1", True),
        ("SIM-1", " SIM-1 ", True),
        ("SIM-1", "sim-1", False),
        ("SIM-1", "SIM-10", False),
        ("SIM-1", None, False),
        (311, "311", True),
        (311, "0311", True),
        ("311", "0311", False),
        (3.0, "3", True),
        (2.89, "2.8900001", True),
        (3.0, "2.89", False),
        (3.0, "strong", False),
        (3.0, "nan", False),
        (0, "", False),
    ],
)
def test_a_value_agrees_as_text_or_as_a_number(wanted, found, agreed):
    facts = {} if found is None else {"DeviceSerialNumber": found}
    assert agrees({"DeviceSerialNumber": wanted}, facts) is agreed


def test_all_keywords_must_agree():
    match = {"StationName": "A", "Manufacturer": "B"}
    assert agrees(match, {"StationName": "A", "Manufacturer": "B", "More": "C"})
    assert not agrees(match, {"StationName": "A"})
    assert not agrees(match, {"StationName": "A", "Manufacturer": "C"})


def test_scanner_and_phantom_are_told_apart(tmp_path):
    site = make_site(tmp_path)
    assert site.identify({"DeviceSerialNumber": "SIM-2", "PatientID": "QA-A"}) == ("South", "Plate A")
    assert site.identify({"DeviceSerialNumber": "SIM-3", "PatientID": "QA-B"}) == (None, "Plate B")
    assert site.identify({}) == (None, None)
    with pytest.raises(KeyError):
        site.scanner("East")
    with pytest.raises(KeyError):
        site.phantom("Plate C")
    assert site.shortest_days("North") == 7
    assert site.shortest_days("nobody") == 7


def test_a_reference_is_taken_from_the_nearest_certified_field():
    vials = [Vial(label=str(n), x_mm=10 * n, y_mm=n * n, radius_mm=4) for n in range(3)]
    values = [(1.5, 1000.0), (2.89, 1150.0), (3.0, 1200.0)]
    refs = [Reference(vial="1", quantity="T1", field_t=field, value_ms=value, u_ms=1) for field, value in values]
    plate = Plate(name="p", vials=vials, references=refs)
    for field, value in ((1.5, 1000.0), (1.494, 1000.0), (3.0, 1200.0), (2.9, 1150.0), (2.96, 1200.0)):
        assert plate.reference("1", Quantity.T1, field).value_ms == value
    for vial, quantity, field in (("1", Quantity.T1, 7.0), ("1", Quantity.T2, 3.0), ("2", Quantity.T1, 3.0)):
        assert plate.reference(vial, quantity, field) is None


# --- blocks to paste ---


@settings(max_examples=60)
@given(serial=header_text, station=header_text, patient=header_text, field_t=st.sampled_from(["3", "1.494", "", "x"]))
def test_what_is_pasted_is_toml_and_matches_the_header_it_came_from(serial, station, patient, field_t):
    facts = {"DeviceSerialNumber": serial, "StationName": station, "PatientID": patient}
    scanner = tomllib.loads(scanner_block(facts | {"MagneticFieldStrength": field_t}))["scanner"][0]
    phantom = tomllib.loads(phantom_block(facts, "plates/a.toml"))["phantom"][0]
    assert scanner["name"]
    assert scanner["field_t"] == (float(field_t) if field_t in ("3", "1.494") else 0.0)
    assert phantom["name"]
    assert agrees(scanner["match"], facts)
    assert agrees(phantom["match"], facts)
    assert ("DeviceSerialNumber" in scanner["match"]) == bool(serial.strip())
    assert phantom["plate"] == "plates/a.toml"


@settings(max_examples=60)
@given(text=st.text(st.characters(codec=None), max_size=30))
def test_a_quoted_text_is_one_toml_string(text):
    """Whatever stands in a header, it cannot add a line to the file it is pasted into."""
    shown = quoted(text)
    assert shown.isprintable()
    assert tomllib.loads(f"name = {shown}")["name"] == text.encode("utf-8", "ignore").decode("utf-8")


def test_a_schedule_to_paste_joins_the_two():
    made = tomllib.loads(schedule_block('A "x"', "B", "recipes/r.toml"))["schedule"][0]
    assert (made["scanner"], made["phantom"], made["recipe"]) == ('A "x"', "B", "recipes/r.toml")


# --- a new folder ---


@pytest.mark.parametrize("name", ['The "old" ward', "back\\slash", "Ægir 東京", "{name}"])
def test_a_new_site_is_a_site(tmp_path, name):
    written = make_skeleton(tmp_path / "new", name)
    assert all(path.is_file() for path in written)
    assert load_site(tmp_path / "new").name == name


def test_a_new_site_never_overwrites(tmp_path):
    (tmp_path / "site.toml").write_text("mine")
    with pytest.raises(UsageError, match="something here already"):
        make_skeleton(tmp_path)
    with pytest.raises(UsageError, match="something here already"):
        make_skeleton(tmp_path / "site.toml")
    assert (tmp_path / "site.toml").read_text() == "mine"
