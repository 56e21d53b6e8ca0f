"""Offline: history in, survey, counts, tables, tree, levels, reports, the invented plant."""
