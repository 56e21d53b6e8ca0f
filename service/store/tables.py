"""The tables, the same in SQLite and PostgreSQL.

A record's readings are one blob of float64 in the order of its layout, NaN where missing;
what does not fit there (channels the model did not know, words never seen, quality
other than good) is JSON in `extra`. Times are integer nanoseconds since 1970, UTC.
"""

from __future__ import annotations

import sqlalchemy as sa

metadata = sa.MetaData()

# SQLite counts rows up by itself only in a column that is exactly INTEGER.
_Id = sa.BigInteger().with_variant(sa.Integer(), "sqlite")

# What gives the columns of a readings blob their meaning, and which model scored.
layout = sa.Table(
    "layout",
    metadata,
    sa.Column("id", _Id, primary_key=True),
    sa.Column("model", sa.Text, nullable=False),
    sa.Column("channels", sa.Text, nullable=False),
    sa.UniqueConstraint("model", name="layout_model"),
)

# One row a source: its standing and the last record that moved it.
source = sa.Table(
    "source",
    metadata,
    sa.Column("id", _Id, primary_key=True),
    sa.Column("name", sa.Text, nullable=False),
    # Newest time of any stored record, also of one ahead of the clock.
    sa.Column("newest_ns", sa.BigInteger, nullable=False),
    # Time of the newest record in the standing.
    sa.Column("last_ns", sa.BigInteger, nullable=False),
    sa.Column("n_records", sa.BigInteger, nullable=False),
    sa.Column("n_over_level", sa.BigInteger, nullable=False),
    sa.Column("model", sa.Text, nullable=False),
    sa.Column("excess", sa.Double),
    sa.Column("sustained", sa.Double),
    sa.Column("alert", sa.SmallInteger, nullable=False),
    sa.Column("standing", sa.LargeBinary),
    # What the alert machine remembers, open alerts included.
    sa.Column("alert_standing", sa.LargeBinary),
    sa.UniqueConstraint("name", name="source_name"),
)

record = sa.Table(
    "record",
    metadata,
    # Rises in the order in which records moved the standings.
    sa.Column("id", _Id, primary_key=True),
    sa.Column("source_id", sa.BigInteger, nullable=False),
    sa.Column("time_ns", sa.BigInteger, nullable=False),
    sa.Column("received_ns", sa.BigInteger, nullable=False),
    sa.Column("request", sa.Text, nullable=False),
    sa.Column("layout_id", sa.BigInteger, nullable=False),
    sa.Column("surprise", sa.Double),
    sa.Column("excess", sa.Double),
    sa.Column("sustained", sa.Double),
    # Number of the channel in the layout, -1 where there is none.
    sa.Column("suspect", sa.SmallInteger, nullable=False),
    # 0 none, 1 record, 2 sustained.
    sa.Column("alert", sa.SmallInteger, nullable=False),
    # FLAG_* below, added up.
    sa.Column("flags", sa.SmallInteger, nullable=False),
    # The suspect's surprise as float64, then what it should have read: low, high and best as
    # float64, or for a state its words with their probabilities as JSON.
    sa.Column("suspect_detail", sa.LargeBinary),
    sa.Column("readings", sa.LargeBinary, nullable=False),
    sa.Column("extra", sa.LargeBinary),
    sa.UniqueConstraint("source_id", "time_ns", name="record_source_time"),
)

# Only the few rows with an alert are in it, so that it costs nothing on the way in. The
# migrations make it so in PostgreSQL too; to say it here would import its dialect at every start.
record_alert = sa.Index(
    "record_alert",
    record.c.time_ns,
    record.c.id,
    sqlite_where=record.c.alert > 0,
)

# What retention took out, and why.
pruned = sa.Table(
    "pruned",
    metadata,
    sa.Column("id", _Id, primary_key=True),
    sa.Column("at_ns", sa.BigInteger, nullable=False),
    sa.Column("reason", sa.Text, nullable=False),
    sa.Column("before_ns", sa.BigInteger, nullable=False),
    sa.Column("n_records", sa.BigInteger, nullable=False),
    sa.Column("n_alerts", sa.BigInteger, nullable=False, server_default=sa.text("0")),
    sa.Column("n_actions", sa.BigInteger, nullable=False, server_default=sa.text("0")),
)

# One row an alert: its newest form as JSON, and what rows are chosen by.
alert = sa.Table(
    "alert",
    metadata,
    sa.Column("number", _Id, primary_key=True),
    sa.Column("id", sa.Text, nullable=False),
    sa.Column("source", sa.Text, nullable=False),
    sa.Column("kind", sa.Text, nullable=False),
    sa.Column("state", sa.Text, nullable=False),
    # When the trouble began, when the alert was raised, when it was cleared (null: open).
    sa.Column("since_ns", sa.BigInteger, nullable=False),
    sa.Column("raised_ns", sa.BigInteger, nullable=False),
    sa.Column("until_ns", sa.BigInteger),
    sa.Column("data", sa.Text, nullable=False),
    sa.UniqueConstraint("id", name="alert_id"),
)
alert_raised = sa.Index("alert_raised", alert.c.raised_ns, alert.c.number)
alert_open = sa.Index(
    "alert_open",
    alert.c.raised_ns,
    alert.c.number,
    sqlite_where=alert.c.until_ns.is_(None),
)

# What people did about alerts and sources; who is empty where the machine did it.
action = sa.Table(
    "action",
    metadata,
    sa.Column("id", _Id, primary_key=True),
    sa.Column("at_ns", sa.BigInteger, nullable=False),
    sa.Column("who", sa.Text, nullable=False),
    sa.Column("what", sa.Text, nullable=False),
    sa.Column("source", sa.Text, nullable=False),
    sa.Column("alert", sa.Text, nullable=False),
    sa.Column("comment", sa.Text, nullable=False),
    sa.Column("details", sa.Text, nullable=False),
)
# One row for the fleet: how many alerts called someone lately.
flood = sa.Table(
    "flood",
    metadata,
    sa.Column("id", sa.SmallInteger, primary_key=True, autoincrement=False),
    sa.Column("data", sa.LargeBinary, nullable=False),
)

action_source = sa.Index("action_source", action.c.source, action.c.id)

# Tokens are kept as SHA-256 of 32 random bytes; the token itself is shown once.
token = sa.Table(
    "token",
    metadata,
    sa.Column("id", sa.Text, primary_key=True),
    sa.Column("name", sa.Text, nullable=False),
    sa.Column("roles", sa.Text, nullable=False),
    sa.Column("hash", sa.LargeBinary, nullable=False),
    sa.Column("made_ns", sa.BigInteger, nullable=False),
    sa.Column("ends_ns", sa.BigInteger),
    sa.UniqueConstraint("name", name="token_name"),
)

FLAG_LATE = 1
FLAG_AHEAD = 2
FLAG_NOT_JUDGED = 4
