"""Ordered changes of the tables, shipped with the package."""
