"""The store: tables, migrations, the writer's transactions and the readers' pages.

It knows SQL and nothing of HTTP or of how a record is scored.
"""
