"""The first tables."""

import sqlalchemy as sa
from alembic import op

revision = "001"
down_revision = None

_Id = sa.BigInteger().with_variant(sa.Integer(), "sqlite")


def upgrade() -> None:
    """Make layout, source, record, pruned and token."""
    op.create_table(
        "layout",
        sa.Column("id", _Id, primary_key=True),
        sa.Column("model", sa.Text, nullable=False),
        sa.Column("channels", sa.Text, nullable=False),
        sa.UniqueConstraint("model", name="layout_model"),
    )
    op.create_table(
        "source",
        sa.Column("id", _Id, primary_key=True),
        sa.Column("name", sa.Text, nullable=False),
        sa.Column("newest_ns", sa.BigInteger, nullable=False),
        sa.Column("last_ns", sa.BigInteger, nullable=False),
        sa.Column("n_records", sa.BigInteger, nullable=False),
        sa.Column("n_over_level", sa.BigInteger, nullable=False),
        sa.Column("model", sa.Text, nullable=False),
        sa.Column("excess", sa.Double),
        sa.Column("sustained", sa.Double),
        sa.Column("alert", sa.SmallInteger, nullable=False),
        sa.Column("standing", sa.LargeBinary),
        sa.UniqueConstraint("name", name="source_name"),
    )
    op.create_table(
        "record",
        sa.Column("id", _Id, primary_key=True),
        sa.Column("source_id", sa.BigInteger, nullable=False),
        sa.Column("time_ns", sa.BigInteger, nullable=False),
        sa.Column("received_ns", sa.BigInteger, nullable=False),
        sa.Column("request", sa.Text, nullable=False),
        sa.Column("layout_id", sa.BigInteger, nullable=False),
        sa.Column("surprise", sa.Double),
        sa.Column("excess", sa.Double),
        sa.Column("sustained", sa.Double),
        sa.Column("suspect", sa.SmallInteger, nullable=False),
        sa.Column("alert", sa.SmallInteger, nullable=False),
        sa.Column("flags", sa.SmallInteger, nullable=False),
        sa.Column("suspect_detail", sa.LargeBinary),
        sa.Column("readings", sa.LargeBinary, nullable=False),
        sa.Column("extra", sa.LargeBinary),
        sa.UniqueConstraint("source_id", "time_ns", name="record_source_time"),
    )
    op.create_index(
        "record_alert",
        "record",
        ["time_ns", "id"],
        sqlite_where=sa.text("alert > 0"),
        postgresql_where=sa.text("alert > 0"),
    )
    op.create_table(
        "pruned",
        sa.Column("id", _Id, primary_key=True),
        sa.Column("at_ns", sa.BigInteger, nullable=False),
        sa.Column("reason", sa.Text, nullable=False),
        sa.Column("before_ns", sa.BigInteger, nullable=False),
        sa.Column("n_records", sa.BigInteger, nullable=False),
    )
    op.create_table(
        "token",
        sa.Column("id", sa.Text, primary_key=True),
        sa.Column("name", sa.Text, nullable=False),
        sa.Column("roles", sa.Text, nullable=False),
        sa.Column("hash", sa.LargeBinary, nullable=False),
        sa.Column("made_ns", sa.BigInteger, nullable=False),
        sa.Column("ends_ns", sa.BigInteger),
        sa.UniqueConstraint("name", name="token_name"),
    )
