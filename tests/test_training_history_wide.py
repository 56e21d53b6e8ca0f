"""Wide rows to records: what is used, what is missing, what is refused and why."""

from __future__ import annotations

from pathlib import Path
from zoneinfo import ZoneInfo

from tests.histories import DATA, a_table, read, rows, write
from training.history.tally import Tally

HEAD = "time,source,flow,pump\n"
T0 = "2026-12-01T04:00:00Z,a"


def test_a_plain_row_is_a_record(tmp_path: Path) -> None:
    path = write(tmp_path, HEAD + f"{T0},12.5,stopped\n")
    assert rows(read(path)) == [(2, "2026-12-01T04:00:00", "a", [12.5, 1.0], "")]


def test_without_a_source_column_there_is_one_machine(tmp_path: Path) -> None:
    (batch,) = read(write(tmp_path, "time,flow,pump\n2026-12-01T04:00:00Z,1,running\n"))
    assert batch.sources == ["machine"]
    assert batch.source_names == ("machine",)


def test_every_reason_to_refuse_a_row_is_told_apart_and_counted() -> None:
    tally = Tally()
    table = a_table(
        {"name": "flow", "span": [0, 1000]},
        {"name": "pressure"},
        {"name": "pump", "kind": "state", "words": ["running", "stopped"]},
    )
    found = {
        line: (values, problem)
        for line, _, _, values, problem in rows(read(DATA / "bad_rows.csv", table, tally))
    }
    assert len(found) == 20
    assert {line: problem for line, (_, problem) in found.items() if problem} == {
        4: "broken time",
        6: "text in a measurement",
        9: "wrong number of cells",
        11: "infinite number",
        15: "no source",
        19: "time without an offset",
    }
    assert all(values == [None] * 3 for values, problem in found.values() if problem)
    assert found[17] == ([None, 3.54, 2.0], "")
    assert (tally.n_rows, tally.n_rejected) == (20, 6)
    assert tally.first["text in a measurement"].endswith("line 6: 'flow' reads 'service'")
    assert tally.first["wrong number of cells"].endswith("line 9: 4 cells, the heading has 5")
    assert dict(tally.outside_span) == {"flow": 1}
    assert dict(tally.unknown_words) == {"pump": 1}


def test_an_export_with_semicolons_decimal_commas_and_local_times_is_read() -> None:
    table = a_table(
        {"name": "Durchfluss [m3/h]"},
        {"name": "Vordruck (bar)"},
        {"name": "Pumpe 1", "kind": "state", "words": ["läuft", "steht"]},
    )
    path = DATA / "semicolon_comma_local.csv"
    found = rows(
        read(path, table, time="Zeitpunkt", source="Station", zone=ZoneInfo("Europe/Vienna"))
    )
    assert found[0] == (2, "2026-10-24T23:40:00", "Erlenhang", [118.2, 3.41, 0.0], "")
    assert {source for _, _, source, _, _ in found} == {"Erlenhang", "Mühlgrund"}
    assert not [problem for *_, problem in found if problem]
    # 16 rows of each station, ten minutes apart through the end of summer time.
    for station in ("Erlenhang", "Mühlgrund"):
        times = [time for _, time, source, _, _ in found if source == station]
        assert times == sorted(set(times))
        assert (times[0], times[-1]) == ("2026-10-24T23:40:00", "2026-10-25T02:10:00")


def test_columns_that_the_table_does_not_name_are_not_read(tmp_path: Path) -> None:
    path = write(tmp_path, "time,remark,flow,pump\n2026-12-01T04:00:00Z,inf,1,running\n")
    assert rows(read(path))[0][-1] == ""


def test_only_the_first_reason_of_a_row_is_counted(tmp_path: Path) -> None:
    tally = Tally()
    read(write(tmp_path, HEAD + "never,,text,\n"), tally=tally)
    assert dict(tally.rejected) == {"no source": 1}


def test_a_bad_row_counts_neither_spans_nor_words(tmp_path: Path) -> None:
    tally = Tally()
    read(write(tmp_path, HEAD + "never,a,2000,jammed\n"), tally=tally)
    assert not tally.outside_span
    assert not tally.unknown_words


def test_a_thousand_in_quotes_between_commas_is_not_taken_for_a_decimal(tmp_path: Path) -> None:
    path = write(tmp_path, HEAD + f'{T0},"1,234",running\n')
    assert rows(read(path))[0][-1] == "text in a measurement"
    assert rows(read(path, decimal=","))[0][3] == [1.234, 0.0]


def test_times_are_kept_as_written_on_request(tmp_path: Path) -> None:
    path = write(tmp_path, HEAD + f"{T0},1,running\nnever,a,1,running\n,a,1,running\n")
    (batch,) = read(path, keep_time_text=True)
    assert batch.time_text == ["2026-12-01T04:00:00Z", "never", ""]
    assert read(path)[0].time_text is None
