"""Retention of alerts: how many alerts and actions went, beside how many records."""

import sqlalchemy as sa
from alembic import op

revision = "003"
down_revision = "002"


def upgrade() -> None:
    """Add the two counts; what was pruned before was records only."""
    for name in ("n_alerts", "n_actions"):
        op.add_column(
            "pruned", sa.Column(name, sa.BigInteger, nullable=False, server_default=sa.text("0"))
        )
