"""Reading a site folder: what is wrong with it is said all at once, with file, line and the nearest known key."""

import re
import shutil

import pytest
from command import ROOT, copy_site

from qa.errors import SiteError
from qa.site import load_plate, load_recipe, load_site

FILES = ("site.toml", "plates/tideline.toml", "recipes/weekly.toml", "limits.toml")
KEY = re.compile(r"^([a-z_0-9]+) *=")


@pytest.fixture
def folder(tmp_path):
    return copy_site(tmp_path / "site", with_data=False)


def change(path, old, new, count=1):
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new, count), encoding="utf-8")


def complaint(folder):
    with pytest.raises(SiteError) as caught:
        load_site(folder)
    assert caught.value.exit_code == 2
    return str(caught.value)


def every_key():
    """Each key of each kind of table once: file, line number, key."""
    found = {}
    for file in FILES:
        table = ""
        for number, line in enumerate((ROOT / "sample_site" / file).read_text(encoding="utf-8").splitlines(), start=1):
            table = line if line.startswith("[") else table
            if key := KEY.match(line):
                found.setdefault((file, table, key[1]), number)
    return [(file, number, key) for (file, _, key), number in found.items()]


def test_the_sample_is_read_whole(folder):
    site = load_site(folder)
    assert [scanner.name for scanner in site.scanners] == ["Quay east", "Quay west", "Lighthouse"]
    assert len(site.phantom("Tideline A").plate.vials) == 12
    assert site.schedule_for("Lighthouse", "Tideline B").every_days == 7
    assert site.schedule_for("Lighthouse", "Tideline A") is None
    assert (len(site.limits), site.baseline_runs, str(site.timezone)) == (6, 4, "Europe/Oslo")
    assert site.database_url == f"sqlite:///{folder.resolve()}/book.sqlite"


# --- keys ---


@pytest.mark.parametrize(("file", "line", "key"), every_key())
def test_a_misspelt_key_is_named_with_its_line_and_the_right_one(folder, file, line, key):
    lines = (folder / file).read_text(encoding="utf-8").splitlines(keepends=True)
    wrong = key[:-1] + key[-1] * 2
    lines[line - 1] = lines[line - 1].replace(key, wrong, 1)
    (folder / file).write_text("".join(lines), encoding="utf-8")
    said = complaint(folder)
    assert str(folder.resolve() / file) in said
    assert f"line {line}: unknown key '{wrong}'" in said
    assert f"did you mean '{key}'?" in said


@pytest.mark.parametrize(
    ("file", "table", "meant"),
    [
        ("site.toml", "[[scaner]]", "scanner"),
        ("site.toml", "[[shedule]]", "schedule"),
        ("plates/tideline.toml", "[[vials]]", "vial"),
        ("recipes/weekly.toml", "[[scans]]", "scan"),
        ("limits.toml", "[[limit]]", "limits"),
    ],
)
def test_a_misspelt_table_is_named_too(folder, file, table, meant):
    lines = (folder / file).read_text(encoding="utf-8").count("\n")
    with (folder / file).open("a", encoding="utf-8") as stream:
        stream.write(f'\n{table}\nname = "x"\n')
    said = complaint(folder)
    assert f"line {lines + 2}: unknown table '{table.strip('[]')}'; did you mean '{meant}'?" in said


def test_what_is_near_nothing_is_told_what_there_is(folder):
    change(folder / "limits.toml", "[[limits]]", "[[limits]]\ncolour = 1")
    assert "known here: since, quantity, vials" in complaint(folder)


def test_every_complaint_of_a_file_is_made_at_once(folder):
    change(folder / "site.toml", "field_t = 3.0", 'field_t = "strong"')
    change(folder / "site.toml", "every_days = 14", "every_days = 0")
    change(folder / "site.toml", 'timezone = "Europe/Oslo"', 'timezone = "Oslo"')
    said = complaint(folder)
    assert [word in said for word in ("'strong'", "every_days", "'Oslo' is not a time zone")] == [True] * 3
    assert len(re.findall(r"line \d+", said)) == 3


# --- values ---


@pytest.mark.parametrize(
    ("file", "old", "new", "said"),
    [
        ("site.toml", "field_t = 3.0", "field_t = -3.0", "'field_t' in [scanner] is -3.0"),
        ("site.toml", "field_t = 3.0", "field_t = inf", "'field_t' in [scanner] is inf"),
        ("site.toml", "every_days = 14", "every_days = 7.5", "'every_days' in [schedule] is 7.5"),
        ("site.toml", "every_days = 14", 'every_days = "weekly"', "'every_days' in [schedule] is 'weekly'"),
        ("site.toml", "grace_days = 3", "grace_days = -1", "'grace_days' in [schedule] is -1"),
        ("site.toml", "baseline_runs = 4", "baseline_runs = 2", "'baseline_runs' in [site] is 2"),
        ("site.toml", "baseline_runs = 4", "plausible_c = [24, 18]", "[lowest, highest]"),
        ("site.toml", "baseline_runs = 4", "plausible_c = 20", "'plausible_c' in [site] is 20: write a list"),
        ("site.toml", 'name = "Quay east"', "name = 5", "'name' in [scanner] is 5"),
        ("site.toml", 'name = "Quay east"', 'name = ""', "'name' in [scanner] is too short or empty"),
        ("site.toml", 'match = { DeviceSerialNumber = "SIM-0311" }', "match = {}", "'match' in [scanner] is too short"),
        ("site.toml", 'match = { DeviceSerialNumber = "SIM-0311" }', 'match = "SIM-0311"', "write a table"),
        ("site.toml", 'match = { DeviceSerialNumber = "SIM-0311" }', "", "the key 'match' is missing in [scanner]"),
        ("plates/tideline.toml", "radius_mm = 9.0", "radius_mm = 0", "'radius_mm' in [vial] is 0"),
        ("plates/tideline.toml", "x_mm = 49.5", "x_mm = nan", "'x_mm' in [vial] is nan"),
        ("plates/tideline.toml", 'label = "1"', "label = 1", "'label' in [vial] is 1"),
        ("plates/tideline.toml", 'quantity = "T1"', 'quantity = "T3"', "must be 'T1' or 'T2'"),
        ("recipes/weekly.toml", 'quantity = "T1"', 'quantity = "T2"', "inversion-recovery measures T1, not T2"),
        ("recipes/weekly.toml", "ti_ms = [35,", "ti_ms = [-35,", "'ti_ms.0' in [scan] is -35"),
        ("recipes/weekly.toml", '"QA IR.*"', '"QA (IR"', "is not a regular expression"),
        ("recipes/weekly.toml", '"spin-echo-train"', '"spin-echo-trian"', "did you mean 'spin-echo-train'?"),
        ("limits.toml", "act_percent = 5.0", "act_percent = 2.0", "act_percent is below watch_percent"),
        ("limits.toml", "since = 2025-01-01", 'since = "spring"', "'since' in [limits] is 'spring'"),
        ("limits.toml", 'against = "baseline"', 'against = "base"', "did you mean 'baseline'?"),
        ("limits.toml", 'vials = ["1", "6"]', 'vials = "1"', "'vials' in [limits] is '1': write a list"),
    ],
)
def test_a_value_of_the_wrong_kind_is_named(folder, file, old, new, said):
    change(folder / file, old, new)
    told = complaint(folder)
    assert said in told
    assert str(folder.resolve() / file) in told
    assert re.search(r"line \d+: ", told)


@pytest.mark.parametrize("zone", ["Oslo", "Europe", "", "../../../etc/passwd", "Europe/Olso", "UTC+25"])
def test_a_time_zone_that_is_none_is_named_with_its_line(folder, zone):
    change(folder / "site.toml", "Europe/Oslo", zone)
    assert f"line 5: '{zone}' is not a time zone" in complaint(folder)


# --- names ---


@pytest.mark.parametrize(
    ("table", "old", "new"),
    [("scanner", '"Quay west"', '"Quay east"'), ("phantom", '"Tideline B"', '"Tideline A"')],
)
def test_two_of_one_name_are_noticed(folder, table, old, new):
    change(folder / "site.toml", old, new)
    assert f"two [[{table}]] tables have the name {new.replace(chr(34), chr(39))}" in complaint(folder)


def test_vials_and_scans_of_one_name_are_noticed(folder):
    change(folder / "plates/tideline.toml", 'label = "2"', 'label = "1"')
    with pytest.raises(SiteError, match="used twice: 1"):
        load_plate(folder / "plates/tideline.toml")
    change(folder / "recipes/weekly.toml", 'name = "T2 train"', 'name = "T1 IR"')
    with pytest.raises(SiteError, match="two scans have one name"):
        load_recipe(folder / "recipes/weekly.toml")


def test_a_reference_for_a_vial_that_is_not_there_is_noticed(folder):
    change(folder / "plates/tideline.toml", 'vial = "2"', 'vial = "22"')
    with pytest.raises(SiteError, match=r"does not have: 22"):
        load_plate(folder / "plates/tideline.toml")


@pytest.mark.parametrize(
    ("file", "old", "new", "said"),
    [
        ("site.toml", 'scanner = "Quay west"', 'scanner = "Quay wset"', "no scanner 'Quay wset'; did you mean 'Quay w"),
        ("site.toml", 'phantom = "Tideline B"', 'phantom = "Tidelin B"', "no phantom 'Tidelin B'; did you mean 'Tid"),
        ("limits.toml", 'quantity = "T1"', 'scanner = "Lighthous"', "no scanner 'Lighthous'; did you mean 'Lighth"),
        ("temperatures.csv", "Lighthouse", "Lighthous", "no scanner 'Lighthous'; it has: Quay east"),
    ],
)
def test_a_name_that_nothing_has_is_noticed(folder, file, old, new, said):
    change(folder / file, old, new)
    assert said in complaint(folder)


# --- files ---


def test_a_folder_that_is_no_site_says_how_to_name_one(tmp_path):
    assert "vialbook new DIR" in complaint(tmp_path)


@pytest.mark.parametrize(("file", "by"), [("plates/tideline.toml", "plate"), ("recipes/weekly.toml", "recipe")])
def test_a_missing_file_is_named_with_what_asks_for_it(folder, file, by):
    (folder / file).unlink()
    said = complaint(folder)
    assert f"{folder.resolve() / file}: there is no such file" in said
    assert f"'s {by}" in said


def test_without_limits_and_temperatures_there_are_none(folder):
    for name in ("limits.toml", "temperatures.csv"):
        (folder / name).unlink()
    site = load_site(folder)
    assert site.limits == ()
    assert site.temperatures.entries == ()


@pytest.mark.parametrize("path", ["../site2/plate.toml", "/etc/hostname", "plates/../../x.toml", "plates/link.toml"])
def test_a_path_that_leaves_the_folder_is_refused(folder, path):
    shutil.copy(folder / "plates/tideline.toml", folder.parent / "x.toml")
    (folder / "plates/link.toml").symlink_to(folder.parent / "x.toml")
    change(folder / "site.toml", "plates/tideline.toml", path)
    assert f"'{path}' lies outside the site folder" in complaint(folder)


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (b"[site\nname = 1", "is not valid TOML"),
        (b'[site]\nname = "a"\nname = "b"', "is not valid TOML"),
        (b'[site]\nname = "\xe6"', "is not UTF-8 text"),
        (b"", "the table [site] is missing"),
        (b"site = 5", "'site' must be a table"),
        (b'[site]\nname = "a"\n[scanner]\nname = "b"', "write [[scanner]] with double brackets"),
        (b'colour = 1\n[site]\nname = "a"', "line 1: unknown key 'colour'"),
    ],
)
def test_a_file_that_is_no_site_file_says_what_is_wrong(folder, content, said):
    (folder / "site.toml").write_bytes(content)
    assert said in complaint(folder)


def test_what_cannot_be_a_path_is_an_error_and_no_crash(folder):
    change(folder / "site.toml", "plates/tideline.toml", r"plates/\u0000.toml")
    assert "site.toml" in complaint(folder)
    for name in ("limits.toml", "temperatures.csv"):
        (folder / name).unlink()
        (folder / name).mkdir()
    shutil.copy(ROOT / "sample_site" / "site.toml", folder)
    assert "limits.toml: cannot be read" in complaint(folder)
    (folder / "limits.toml").rmdir()
    assert "temperatures.csv: cannot be read" in complaint(folder)


def test_a_file_with_a_byte_order_mark_and_windows_line_ends_is_read(folder):
    for name in (*FILES, "temperatures.csv"):
        text = (folder / name).read_text(encoding="utf-8").replace("\n", "\r\n")
        (folder / name).write_bytes(b"\xef\xbb\xbf" + text.encode("utf-8"))
    assert len(load_site(folder).limits) == 6


@pytest.mark.parametrize(
    ("written", "read"),
    [
        ("sqlite:///data/book.sqlite", "sqlite:///{folder}/data/book.sqlite"),
        ("sqlite:////srv/book.sqlite", "sqlite:////srv/book.sqlite"),
        ("postgresql+psycopg://u@h/n", "postgresql+psycopg://u@h/n"),
    ],
)
def test_the_database_is_relative_to_the_folder_unless_the_environment_names_one(folder, monkeypatch, written, read):
    change(folder / "site.toml", "sqlite:///book.sqlite", written)
    assert load_site(folder).database_url == read.format(folder=folder.resolve())
    monkeypatch.setenv("VIALBOOK_DATABASE", "postgresql://other/book")
    assert load_site(folder).database_url == "postgresql://other/book"
