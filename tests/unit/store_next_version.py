"""A next version of Vialbook, whose migration adds a table."""

from qa.places import shipped
from qa.store import migrating
from qa.store import opening as opening_module
from qa.store import revision as revision_module
from qa.store.revision import HEAD

NEXT = "0002_more"


def become_next_version(monkeypatch, folder):
    """From here on, this version's tables are those of the next one."""
    scripts = folder / "migrations"
    original = shipped("migrations")
    (scripts / "versions").mkdir(parents=True)
    for name in ("env.py", "script.py.mako"):
        (scripts / name).write_bytes((original / name).read_bytes())
    for path in (original / "versions").glob("*.py"):
        (scripts / "versions" / path.name).write_bytes(path.read_bytes())
    (scripts / "versions" / f"{NEXT}.py").write_text(
        f'import sqlalchemy as sa\nfrom alembic import op\nrevision = "{NEXT}"\n'
        f'down_revision = "{HEAD}"\nbranch_labels = depends_on = None\n'
        'def upgrade():\n    op.create_table("more", sa.Column("id", sa.Integer(), primary_key=True))\n'
    )
    for module in (revision_module, migrating, opening_module):
        monkeypatch.setattr(module, "HEAD", NEXT)
    monkeypatch.setattr(migrating, "shipped", lambda name: scripts)
