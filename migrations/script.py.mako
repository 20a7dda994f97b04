"""${message}"""

from alembic import op

revision = ${repr(up_revision)}
down_revision = ${repr(down_revision)}
branch_labels = None
depends_on = None


def upgrade() -> None:
    # Raw SQL only. Never batch mode: it rebuilds a table and loses its triggers, and the connection refuses the drop.
    ${upgrades if upgrades else "pass"}
