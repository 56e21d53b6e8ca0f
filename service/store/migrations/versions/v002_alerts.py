"""Alerts, what was done about them, and what the alert machine remembers of a source."""

import sqlalchemy as sa
from alembic import op

revision = "002"
down_revision = "001"

_Id = sa.BigInteger().with_variant(sa.Integer(), "sqlite")


def upgrade() -> None:
    """Add source.alert_standing and make alert and action."""
    op.add_column("source", sa.Column("alert_standing", sa.LargeBinary))
    op.create_table(
        "alert",
        sa.Column("number", _Id, primary_key=True),
        sa.Column("id", sa.Text, nullable=False),
        sa.Column("source", sa.Text, nullable=False),
        sa.Column("kind", sa.Text, nullable=False),
        sa.Column("state", sa.Text, nullable=False),
        sa.Column("since_ns", sa.BigInteger, nullable=False),
        sa.Column("raised_ns", sa.BigInteger, nullable=False),
        sa.Column("until_ns", sa.BigInteger),
        sa.Column("data", sa.Text, nullable=False),
        sa.UniqueConstraint("id", name="alert_id"),
    )
    op.create_index("alert_raised", "alert", ["raised_ns", "number"])
    op.create_index(
        "alert_open",
        "alert",
        ["raised_ns", "number"],
        sqlite_where=sa.text("until_ns IS NULL"),
        postgresql_where=sa.text("until_ns IS NULL"),
    )
    op.create_table(
        "action",
        sa.Column("id", _Id, primary_key=True),
        sa.Column("at_ns", sa.BigInteger, nullable=False),
        sa.Column("who", sa.Text, nullable=False),
        sa.Column("what", sa.Text, nullable=False),
        sa.Column("source", sa.Text, nullable=False),
        sa.Column("alert", sa.Text, nullable=False),
        sa.Column("comment", sa.Text, nullable=False),
        sa.Column("details", sa.Text, nullable=False),
    )
    op.create_index("action_source", "action", ["source", "id"])
    op.create_table(
        "flood",
        sa.Column("id", sa.SmallInteger, primary_key=True, autoincrement=False),
        sa.Column("data", sa.LargeBinary, nullable=False),
    )
