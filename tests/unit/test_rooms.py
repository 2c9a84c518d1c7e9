"""The shape of the house: imports go one way, the light stays light, and the top level is what DEVELOPERS.md says."""

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]


def test_imports_go_only_downward():
    done = subprocess.run(
        [sys.executable, "-c", "from importlinter.cli import lint_imports_command as c; c()", "--no-cache"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr


HEAVY = {"numpy", "scipy", "pandas", "pydicom", "sqlalchemy", "plotly", "pydantic", "alembic", "PIL"}


@pytest.mark.parametrize(
    ("module", "absent"),
    [
        ("qa.cli", HEAVY),  # so that `vialbook --help` answers at once
        ("qa.store", {"pandas", "alembic"}),
        ("qa.fit", {"pandas", "scipy.stats", "scipy.optimize"}),
        ("qa.trend", {"scipy.stats", "statsmodels"}),
        ("qa.report", {"plotly.graph_objects", "scipy"}),
    ],
)
def test_importing_a_room_does_not_pull_in_what_only_some_of_its_work_needs(module, absent):
    code = f"import sys, {module}; print(*sorted(sys.modules))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert not absent & set(done.stdout.split())


def test_the_visible_top_level_is_what_the_map_shows():
    tracked = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True).stdout.split()
    visible = {path.split("/")[0] for path in tracked if not path.startswith(".")}
    assert visible == {
        "README.md",
        "DEVELOPERS.md",
        "pyproject.toml",
        "qa",
        "migrations",
        "reports",
        "tests",
        "sample_site",
    }


def test_every_room_says_what_enters_and_what_leaves():
    for room in ("site", "intake", "locate", "fit", "store", "trend", "compare", "report", "simulate"):
        head = (ROOT / "qa" / room / "__init__.py").read_text().split('"""')[1].lower()
        assert "enters" in head, room
        assert "leaves" in head, room
        assert "knows nothing of" in head, room
