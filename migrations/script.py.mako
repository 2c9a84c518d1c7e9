"""${message}.

Say here what happens to old rows. No way down: restore the copy made before migrating.
"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = ${repr(up_revision)}  # NNNN_what, at most 32 characters; qa.store.revision.HEAD names the last
down_revision = ${repr(down_revision)}
branch_labels = ${repr(branch_labels)}
depends_on = ${repr(depends_on)}


def upgrade() -> None:
    ${upgrades if upgrades else "pass"}
