"""temperatures.csv as people write it, and what it says for a run."""

from datetime import UTC, datetime
from zoneinfo import ZoneInfo

import pytest

from qa.errors import SiteError
from qa.site.temperatures import read_temperatures

SCANNERS = ["North", "South"]
OSLO = ZoneInfo("Europe/Oslo")
HEAD = "scanner,date,celsius\n"
WHEN = datetime(2026, 3, 2, 7, 30, tzinfo=UTC)


@pytest.fixture
def read(tmp_path):
    def work(text, zone=OSLO):
        content = text if isinstance(text, bytes) else text.encode("utf-8")
        (tmp_path / "temperatures.csv").write_bytes(content)
        return read_temperatures(tmp_path / "temperatures.csv", SCANNERS, zone)

    return work


@pytest.mark.parametrize(
    "text",
    [
        f"{HEAD}North,2026-03-02,20.4\n",
        f"{HEAD}North,2026-03-02,20.4",
        f"\ufeff{HEAD}North,2026-03-02,20.4\n",
        "scanner,date,celsius\r\nNorth,2026-03-02,20.4\r\n",
        "scanner,date,celsius\rNorth,2026-03-02,20.4\r",
        'scanner,date,celsius\n"North","2026-03-02","20.4"\n',
        " Scanner , DATE , Celsius \n North , 2026-03-02 , 20.4 \n",
        "celsius,scanner,date\n20.4,North,2026-03-02\n",
        f"# from the wall\n\n{HEAD}\n# a note, with a comma\n,,\nNorth,2026-03-02,+2.04e1\n",
        f"{HEAD}North,20260302,20.4\n",
        f"{HEAD}North,2026-03-02T07:31,20.4\n",
        f"{HEAD}North,2026-03-02 07:31:00+01:00,20.4\n",
    ],
)
def test_all_these_say_the_same(read, text):
    assert read(text).celsius("North", WHEN, OSLO) == 20.4


@pytest.mark.parametrize(
    ("line", "said"),
    [
        ("Nord,2026-03-02,20.4", "site.toml has no scanner 'Nord'; it has: North, South"),
        ("north,2026-03-02,20.4", "no scanner 'north'"),
        ("North,2.3.2026,20.4", "'2.3.2026' is not a date"),
        ("North,2026-02-30,20.4", "'2026-02-30' is not a date"),
        ("North,,20.4", "'' is not a date"),
        ("North,0001-01-01T00:00,20.4", "too long ago"),
        ("North,2026-03-02,warm", "'warm' is not a number"),
        ("North,2026-03-02,", "'' is not a number"),
        ("North,2026-03-02,nan", "not a temperature of a phantom in use"),
        ("North,2026-03-02,inf", "not a temperature of a phantom in use"),
        ("North,2026-03-02,68.7", "not a temperature of a phantom in use (0 to 50 °C)"),
        ("North,2026-03-02,-0.1", "not a temperature of a phantom in use"),
        ("North,2026-03-02", "2 values where 3 are needed"),
        ("North,2026-03-02,20,4", "4 values where 3 are needed (scanner,date,celsius); write 20.4 with a point"),
    ],
)
def test_a_bad_line_is_named(read, line, said):
    with pytest.raises(SiteError) as caught:
        read(f"{HEAD}South,2026-03-01,20.0\n{line}\n")
    assert "line 3: " in str(caught.value)
    assert "line 2: " not in str(caught.value)
    assert said in str(caught.value)


def test_every_bad_line_is_named_at_once(read):
    with pytest.raises(SiteError) as caught:
        read(f"{HEAD}Nord,2026-03-02,20.4\nNorth,2026-03-02,20.4\nNorth,never,20.4\n")
    assert [f"line {n}:" in str(caught.value) for n in (2, 3, 4)] == [True, False, True]


@pytest.mark.parametrize(
    ("content", "said"),
    [
        ("scanner;date;celsius\nNorth;2026-03-02;20,4\n", "with commas between them"),
        ("scanner,date\nNorth,2026-03-02\n", "the columns must be scanner,date,celsius"),
        ("North,2026-03-02,20.4\n", "line 1: the columns must be"),
        ("scanner,date,celsius,celsius\n", "the columns must be"),
        (b"scanner,date,celsius\nN\xf8rd,2026-03-02,20.4\n", "is not UTF-8 text"),
        ('scanner,date,celsius\n"' + "x" * 200_000 + '",2026-03-02,20\n', "field larger than field limit"),
    ],
)
def test_a_file_that_is_no_such_table_says_so(read, content, said):
    with pytest.raises(SiteError) as caught:
        read(content)
    assert said in str(caught.value)
    assert "temperatures.csv" in str(caught.value)
    assert len(str(caught.value)) < 1000


@pytest.mark.parametrize("content", ["", "\n\n", "# nothing yet\n", HEAD])
def test_an_empty_table_has_no_temperature(read, content):
    assert read(content).celsius("North", WHEN, OSLO) is None


def test_no_file_has_no_temperature(tmp_path):
    assert read_temperatures(tmp_path / "temperatures.csv", SCANNERS, OSLO).entries == ()


def test_the_day_is_that_of_the_site(read):
    """23:30 UTC is the next day in Oslo."""
    table = read(f"{HEAD}North,2026-03-03,21.0\n")
    assert table.celsius("North", datetime(2026, 3, 2, 23, 30, tzinfo=UTC), OSLO) == 21.0
    assert table.celsius("North", datetime(2026, 3, 3, 23, 30, tzinfo=UTC), OSLO) is None
    assert table.celsius("South", datetime(2026, 3, 3, 7, 30, tzinfo=UTC), OSLO) is None


def test_the_entry_nearest_in_time_counts_and_one_without_a_time_only_if_none_is_near(read):
    lines = "North,2026-03-02,19.0\nNorth,2026-03-02T08:00,20.0\nNorth,2026-03-02T12:00,21.0\n"
    table = read(HEAD + lines)
    for hour, celsius in ((7, 20.0), (9, 20.0), (11, 21.0), (16, 21.0)):
        assert table.celsius("North", datetime(2026, 3, 2, hour - 1, 10, tzinfo=UTC), OSLO) == celsius
    assert read(f"{HEAD}North,2026-03-02,19.0\n").celsius("North", WHEN, OSLO) == 19.0
