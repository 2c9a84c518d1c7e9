"""Simulated files before outside judges: Debian's dciodvfy finds no error, dcmdump reads the values that were meant."""

import re
import subprocess

import pytest
from intake_site import TE_MS, TI_MS, run

pytestmark = pytest.mark.dicom_tools

PLAIN = {"form": "classic"}
CASES = {
    "classic": PLAIN,
    "classic, slope per frame": {"form": "classic", "scaling": "slope-per-frame"},
    "classic, private slope": {"form": "classic", "scaling": "private-slope", "private_creator": "INVENTED DD 001"},
    "classic, real": {"form": "classic", "written": "real"},
    "one series": {"form": "one-series"},
    "enhanced": {"form": "enhanced"},
    "enhanced, slope per frame": {"form": "enhanced", "scaling": "slope-per-frame"},
    "enhanced, real and imaginary": {"form": "enhanced", "written": "real-imaginary"},
}


@pytest.mark.parametrize("case", CASES)
def test_dciodvfy_finds_no_error(tmp_path, case):
    for path in run(tmp_path / "run", **CASES[case]).files:
        done = subprocess.run(["dciodvfy", str(path)], capture_output=True, text=True, check=False)
        said = done.stdout + done.stderr
        assert "MRImage" in said or "EnhancedMRImage" in said  # it looked at the object, not only at the file
        assert [line for line in said.splitlines() if line.startswith("Error")] == []
        assert done.returncode == 0


def dumped(path, keyword):
    """All values of a keyword as dcmdump prints them, in the order of the file."""
    done = subprocess.run(["dcmdump", "+L", "+P", keyword, str(path)], capture_output=True, text=True, check=True)
    return [re.search(r"^\s*\(\w+,\w+\) \w\w \[?([^\]#]*?)\]?\s+#", line).group(1) for line in done.stdout.splitlines()]


def test_dcmdump_reads_classic_values(tmp_path):
    record = run(tmp_path / "run")
    times = [dumped(path, "InversionTime") for path in record.files[: len(TI_MS)]]
    assert [float(value) for found in times for value in found] == list(TI_MS)
    echoes = [dumped(path, "EchoTime") for path in record.files[len(TI_MS) :]]
    assert [float(value) for found in echoes for value in found] == list(TE_MS)
    first = record.files[0]
    assert [float(value) for value in dumped(first, "RepetitionTime")] == [5000.0]
    assert dumped(first, "PixelSpacing") == ["3.0\\3.0"]
    assert dumped(first, "Rows") == ["48"]
    assert dumped(first, "DeviceSerialNumber") == ["SIM-1"]
    assert dumped(first, "PatientID") == ["QA-A"]


def test_dcmdump_reads_enhanced_values(tmp_path):
    recovery, train = run(tmp_path / "run", "enhanced").files
    assert [float(value) for value in dumped(recovery, "InversionTimes")] == list(TI_MS)
    assert [float(value) for value in dumped(train, "EffectiveEchoTime")] == list(TE_MS)
    assert dumped(train, "NumberOfFrames") == [str(len(TE_MS))]
    assert [float(value) for value in dumped(train, "RepetitionTime")] == [3000.0]
