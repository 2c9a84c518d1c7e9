"""A wheel, installed into a fresh environment and used from another folder, does the main job."""

import os
import shutil
import subprocess
import sys
import venv
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]


def run(*command, cwd, codes=(0,), **more):
    environment = {key: value for key, value in os.environ.items() if not key.startswith(("PYTHON", "VIALBOOK"))}
    done = subprocess.run(command, cwd=cwd, capture_output=True, text=True, env=environment, check=False, **more)
    assert done.returncode in codes, done.stdout + done.stderr
    return done


def test_a_wheel_does_the_main_job_from_another_folder(tmp_path):
    run(sys.executable, "-m", "build", "--wheel", "--no-isolation", "--outdir", str(tmp_path), str(ROOT), cwd=tmp_path)
    wheel = next(tmp_path.glob("vialbook-*.whl"))
    venv.create(tmp_path / "fresh", with_pip=True)
    binaries = tmp_path / "fresh" / "bin"
    run(str(binaries / "python"), "-m", "pip", "install", "-q", str(wheel), cwd=tmp_path, timeout=600)

    site = tmp_path / "elsewhere"
    shutil.copytree(
        ROOT / "sample_site", site, ignore=shutil.ignore_patterns("book.sqlite*", "archive", "pages", "grown", "run")
    )
    done = run(str(binaries / "vialbook"), "ingest", "incoming", "--site", str(site), cwd=site, codes=(0, 1))
    assert (site / "book.sqlite").exists()
    front = site / "pages" / "index.html"
    assert front.exists()
    assert str(front) in done.stdout + done.stderr or "index.html" in done.stdout + done.stderr
