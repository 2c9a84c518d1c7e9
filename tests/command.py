"""The real command, run as a user would, on copies of the sample site."""

import json
import os
import shutil
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

from jsonschema import Draft202012Validator

ROOT = Path(__file__).resolve().parents[1]
TODAY = "2026-12-01"  # the day after the sample's last run
MADE = ("book.sqlite*", "archive", "pages", "run", "grown")


@dataclass(frozen=True)
class Done:
    """What a command gave back."""

    code: int
    out: str
    err: str

    @property
    def document(self):
        return json.loads(self.out)


def vialbook(*words, site=None, codes=(0,), cwd=None, environment=None):
    """Run the command as a user would; fails the test on any other exit code."""
    kept = {key: value for key, value in os.environ.items() if not key.startswith("VIALBOOK")}
    command = [sys.executable, "-c", "from qa.cli import main; main()", *map(str, words)]
    if site is not None:
        command += ["--site", str(site)]
    done = subprocess.run(
        command, capture_output=True, text=True, cwd=cwd, env=kept | (environment or {}), check=False, timeout=300
    )
    assert done.returncode in codes, f"exit code {done.returncode}\n{done.stdout}\n{done.stderr}"
    return Done(done.returncode, done.stdout, done.stderr)


def answer(command, *words, site, codes=(0,), schema=None):
    """Run a command with ``--json``; its document, checked against its schema."""
    document = vialbook(command, *words, "--json", "--quiet", site=site, codes=codes).document
    described = json.loads((ROOT / "qa" / "schemas" / f"{schema or command}.json").read_text())
    Draft202012Validator(described, format_checker=Draft202012Validator.FORMAT_CHECKER).validate(document)
    return document


def copy_site(target, *, with_data=True):
    """A fresh copy of the sample site."""
    ignored = MADE if with_data else (*MADE, "incoming")
    shutil.copytree(ROOT / "sample_site", target, ignore=shutil.ignore_patterns(*ignored))
    return target
