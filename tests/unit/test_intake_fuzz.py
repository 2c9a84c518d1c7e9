"""Spoilt files: whatever the bytes are, intake raises nothing and loses no file; a sample of tests/bench."""

import numpy as np
import pytest
from intake_mutations import MUTATIONS, mutated, spoilt
from intake_site import RECIPE, make_site, run

from qa import intake
from qa.intake.holds import CODES


@pytest.fixture(scope="module")
def originals(tmp_path_factory):
    """One file of every kind that the simulator writes."""
    folder = tmp_path_factory.mktemp("simulated")
    kinds = {
        "classic": {},
        "enhanced": {"form": "enhanced"},
        "sloped": {"scaling": "private-slope", "private_creator": "INVENTED MR IMAGING DD 001"},
        "signed": {"form": "enhanced", "written": "real"},
    }
    return [path.read_bytes() for name, kind in kinds.items() for path in run(folder / name, **kind).files[-2:]]


def take(site, folder):
    """Gather and load a folder; the promise about every file is checked."""
    taken = intake.gather([folder], site, known=())
    used = sum(len(session.files) for session in taken.sessions)
    assert taken.seen == used + taken.duplicates + len(taken.held)
    held = list(taken.held)
    for session in taken.sessions:
        loaded = intake.load(session, RECIPE)
        held += loaded.held
        for series in loaded.series:
            assert np.isfinite(series.frames).all()
            assert series.frames.dtype == np.float32
            assert len(series.frames) == len(series.ti_ms) == len(series.te_ms) == len(series.tr_ms) > 0
            assert min(series.grid.spacing_mm) > 0
    assert {one.code for one in held} <= set(CODES)
    assert all(one.reason for one in held)
    return taken, held


@pytest.mark.parametrize("name", MUTATIONS)
def test_spoilt_files_are_used_or_held(originals, tmp_path, name):
    """Fifteen of each kind, all in one folder, with a good run among them that must come through unharmed."""
    site = make_site(tmp_path / "site")
    good = run(tmp_path / "in" / "good", scanner="South")
    for k in range(15):
        rng = np.random.default_rng([2026, k])
        content = spoilt(name, originals[k % len(originals)], rng)
        (tmp_path / "in" / f"{k}.dcm").write_bytes(content)
    taken, _ = take(site, tmp_path / "in")
    whole = [
        session for session in taken.sessions if session.study_uid == good.study_uid and session.scanner == "South"
    ]
    assert [len(session.files) for session in whole] == [len(good.files)]


def test_the_sample_is_what_the_seed_says(originals):
    one, other = (mutated(originals, np.random.default_rng(9)) for _ in range(2))
    assert one == other
    changed = [mutated(originals, np.random.default_rng(k))[1] not in originals for k in range(60)]
    assert sum(changed) > 50
