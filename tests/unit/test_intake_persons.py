"""Entries that may belong to a person: noticed, never kept, never shown; phantoms' own names are none."""

import pydicom
import pytest
from intake_site import RECIPE, change, copied, edit, make_site, run
from numpy.testing import assert_array_equal
from pydicom.dataset import Dataset
from pydicom.sequence import Sequence
from pydicom.uid import DeflatedExplicitVRLittleEndian, ExplicitVRBigEndian, ImplicitVRLittleEndian

from qa import intake
from qa.intake.persons import personal_keywords

PERSON = {
    "PatientName": "Nordmann^Kari",
    "PatientBirthDate": "19710304",
    "PatientAddress": "Fjordveien 7",
    "OtherPatientIDs": "04037112345",
    "PatientComments": "claustrophobic",
    "PatientMotherBirthName": "Havn^Siri",
}


@pytest.fixture(scope="module")
def original(tmp_path_factory):
    return run(tmp_path_factory.mktemp("simulated") / "run")


@pytest.fixture
def record(original, tmp_path):
    return copied(original, tmp_path / "in")


def take(tmp_path, known=(), **tables):
    return intake.gather([tmp_path / "in"], make_site(tmp_path / "site", **tables), known=known)


def everything_below(folder):
    return b"".join(path.read_bytes() for path in folder.rglob("*") if path.is_file())


@pytest.mark.parametrize("syntax", [None, ImplicitVRLittleEndian, ExplicitVRBigEndian])
def test_nothing_of_a_person_is_kept_and_it_is_said(record, tmp_path, syntax):
    plain = intake.load(take(tmp_path).sessions[0], RECIPE)
    for path in record.files:
        dataset = pydicom.dcmread(path)
        change(dataset, **PERSON)
        if syntax == ExplicitVRBigEndian:
            dataset.PixelData = dataset.pixel_array.astype(">u2").tobytes()
        dataset.file_meta.TransferSyntaxUID = syntax or dataset.file_meta.TransferSyntaxUID
        little, implicit = syntax != ExplicitVRBigEndian, syntax == ImplicitVRLittleEndian
        pydicom.dcmwrite(path, dataset, implicit_vr=implicit, little_endian=little)
    for path in (tmp_path / "site" / "archive").rglob("*.dcm"):
        path.unlink()
    taken = take(tmp_path)
    (session,) = taken.sessions
    assert taken.held == ()
    assert [remark.code for remark in session.remarks] == ["personal-data"]
    kept = everything_below(tmp_path / "site")
    assert not [value for value in PERSON.values() if value.encode() in kept]
    assert not [value for value in PERSON.values() if value in str(session)]
    for one, other in zip(intake.load(session, RECIPE).series, plain.series, strict=True):
        assert_array_equal(one.frames, other.frames)
    again, held = intake.session_from_archive(make_site(tmp_path / "site"), session.files, run=session.run)
    assert held == ()
    assert len(again.files) == len(session.files)


def test_a_blanked_file_is_known_when_it_comes_again(record, tmp_path):
    for path in record.files:
        edit(path, **PERSON)
    (session,) = take(tmp_path).sessions
    again = take(tmp_path, known={file.sha256 for file in session.files})
    assert (again.sessions, again.duplicates, again.held) == ((), len(record.files), ())


def test_an_unknown_person_is_held_and_not_shown(record, tmp_path):
    """A patient's images in the wrong folder: held, and neither the message nor the archive tells who it is."""
    for path in record.files:
        edit(path, PatientID="04037112345", **PERSON)
    taken = take(tmp_path)
    assert {held.code for held in taken.held} == {"unknown-phantom"}
    assert "04037112345" not in str(taken.held)
    assert "may belong to a person" in taken.held[0].reason
    assert not [value for value in PERSON.values() if value.encode() in everything_below(tmp_path / "site")]


def test_what_cannot_be_blanked_in_place_is_held(record, tmp_path):
    other = Dataset()
    other.PatientID = "04037112345"
    edit(record.files[0], OtherPatientIDsSequence=Sequence([other]))
    dataset = pydicom.dcmread(record.files[1])
    change(dataset, **PERSON)
    dataset.file_meta.TransferSyntaxUID = DeflatedExplicitVRLittleEndian
    dataset.save_as(record.files[1])
    taken = take(tmp_path)
    assert {held.path: held.code for held in taken.held} == {str(path): "names-a-person" for path in record.files[:2]}
    assert "Nordmann" not in str(taken.held)
    assert b"04037112345" not in everything_below(tmp_path / "site")


@pytest.mark.parametrize(
    "name",
    ["", "Phantom^QA", "QA", "qa phantom", "PHANTOM_A^Weekly", "QC^Plate", "Test^Object", "QA-A", "qa-a", "^^^^"],
)
def test_names_of_phantoms(name):
    dataset = Dataset()
    change(dataset, PatientName=name, PatientID="QA-A")
    assert personal_keywords(dataset) == []


@pytest.mark.parametrize("name", ["Nordmann^Kari", "Testa^Maria", "Qadir^Amir", "Li^Wu"])
def test_names_of_persons(name):
    dataset = Dataset()
    change(dataset, PatientName=name, PatientID="QA-A")
    assert personal_keywords(dataset) == ["PatientName"]


def test_empty_entries_are_none():
    dataset = Dataset()
    change(dataset, **dict.fromkeys(PERSON, ""))
    assert personal_keywords(dataset) == []
