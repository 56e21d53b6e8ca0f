"""History in: CSV and Parquet, wide and long, streamed in batches of bounded size.

The way of a row: file -> cells (`delimited`, `columnar`) -> times and readings
(`times`, `readings`) -> records (`wide`, `long`) -> `HistoryBatch` (`reading`) ->
kept per source in time order on disk (`spool`). `tally` counts what was wrong.
"""
