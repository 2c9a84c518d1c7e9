"""Sample sites for tests through the real command."""

import shutil

import pytest
from command import TODAY, copy_site, vialbook


@pytest.fixture(scope="session")
def taken_in(tmp_path_factory):
    """The sample site with its runs taken in, and what the command said. Read only: copy it before changing it."""
    site = copy_site(tmp_path_factory.mktemp("sample") / "site")
    done = vialbook("ingest", site / "incoming", "--today", TODAY, site=site, codes=(1,))
    return site, done


@pytest.fixture
def own_site(taken_in, tmp_path):
    """A copy of the taken-in sample site for a test that changes it."""
    site = tmp_path / "site"
    shutil.copytree(taken_in[0], site, ignore=shutil.ignore_patterns("incoming", "pages"))
    return site


@pytest.fixture
def fresh_site(tmp_path):
    """The sample site's own files, without data and without a book."""
    return copy_site(tmp_path / "site", with_data=False)
