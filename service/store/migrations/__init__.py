"""Ordered changes of the tables, shipped with the package."""

# The last of `versions`; a test holds it against their order.
HEAD = "003"
