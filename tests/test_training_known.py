"""An incidents file is read as written, and nonsense in it gets a line and a way out."""

from __future__ import annotations

from pathlib import Path
from zoneinfo import ZoneInfo

import pytest

from training.history.options import HistoryOptions
from training.known import BadIncidents, Known, load_known, refuse_unknown_sources
from training.plant.channels import NAMES
from training.plant.draw import IncidentRates
from training.plant.simulate import PlantConfig, incidents_of
from training.plant.writers import write_incidents

HEAD = "source,start,end,kind,size,channels\n"
GOOD = "a,2026-01-01T00:00:00Z,2026-01-01T02:00:00Z,offset,3.5,flow|power\n"
CHANNELS = ("flow", "power", "level")


def load(folder: Path, text: str | bytes, **options: object) -> tuple[Known, ...]:
    path = folder / "incidents.csv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return load_known(path, HistoryOptions(**options), CHANNELS)  # type: ignore[arg-type]


def test_an_incident_is_read_as_it_was_written(tmp_path: Path) -> None:
    found = load(tmp_path, HEAD + GOOD)
    start = 1_767_225_600_000_000_000
    expected = Known("a", start, start + 7200 * 10**9, "offset", 3.5, ("flow", "power"), 2)
    assert found == (expected,)


def test_what_the_plant_writes_comes_back(tmp_path: Path) -> None:
    config = PlantConfig(seed=5, n_stations=2, days=4, rates=IncidentRates(per_station_day=2.0))
    truth = incidents_of(config)
    write_incidents(truth, tmp_path / "incidents.csv")
    found = load_known(tmp_path / "incidents.csv", HistoryOptions(), NAMES)
    assert len(found) == len(truth) > 8
    by_start = {(one.source, one.start_ns): one for one in found}
    for one in truth:
        known = by_start[one.source, one.start_ns]
        assert (known.end_ns, known.kind, known.channels) == (one.end_ns, one.kind, one.channels)
        assert known.size == (None if one.size is None else pytest.approx(one.size, abs=1e-3))


def test_order_is_by_source_and_start_and_blank_lines_are_nothing(tmp_path: Path) -> None:
    late = GOOD.replace("a,2026-01-01T00", "a,2025-01-01T00")
    found = load(tmp_path, HEAD + "b" + GOOD[1:] + "\n" + GOOD + ",,,,,\n" + late)
    assert [(one.source, one.line) for one in found] == [("a", 6), ("a", 4), ("b", 2)]


def test_local_times_are_those_of_the_zone(tmp_path: Path) -> None:
    local = GOOD.replace("Z", "")
    found = load(tmp_path, HEAD + local, zone=ZoneInfo("Europe/Lisbon"))
    assert found == load(tmp_path, HEAD + GOOD)
    found = load(tmp_path, HEAD + local, zone=ZoneInfo("Europe/Helsinki"))
    assert found[0].start_ns == 1_767_225_600_000_000_000 - 7200 * 10**9


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("", "first line must read source,start,end,kind,size,channels"),
        ("source,start\n", "first line must read"),
        (HEAD, "a heading and no incident"),
        (HEAD + "a,b,c\n", "line 2: 3 cells; an incident has 6"),
        (HEAD + GOOD.replace("a,", ",", 1), "line 2: source is empty"),
        (HEAD + GOOD.replace("offset", ""), "line 2: kind is empty"),
        (HEAD + GOOD.replace("flow|power", ""), "line 2: channels is empty"),
        (HEAD + GOOD.replace("2026-01-01T00", "2026-13-01T00"), "line 2: broken time: '2026-13"),
        (HEAD + GOOD.replace("Z", ""), "line 2: time without an offset.*--zone"),
        (HEAD + GOOD.replace("T02", "T00"), "line 2: start .* is not before end"),
        (HEAD + GOOD.replace("3.5", "big"), "line 2: size 'big' is no number; leave it empty"),
        (HEAD + GOOD.replace("3.5", "-1"), "line 2: size -1 is not above 0"),
        (HEAD + GOOD.replace("3.5", "inf"), "line 2: size inf is not above 0 and finite"),
        (HEAD + GOOD.replace("flow|", "flaw|"), "line 2: channel 'flaw' .* nearest is 'flow'"),
        (HEAD + GOOD.replace("flow|", "x|"), "channel 'x' .* there are 'flow', 'power', 'level'"),
        (HEAD + GOOD.replace("flow|power", "flow|"), "line 2: channel '' is not in the model"),
        (HEAD + GOOD + GOOD, "line 3: is the incident of line 2 once more"),
        (b"\xff\xfe\x00", "is not a CSV file in UTF-8"),
    ],
)
def test_nonsense_gets_one_sentence(tmp_path: Path, text: str | bytes, match: str) -> None:
    with pytest.raises(BadIncidents, match=match) as caught:
        load(tmp_path, text)
    assert caught.value.exit_code == 1
    assert "\n" not in str(caught.value)


def test_an_incident_where_no_record_is_names_the_nearest_source(tmp_path: Path) -> None:
    found = load(tmp_path, HEAD + GOOD.replace("a,", "mill-lame,", 1))
    with pytest.raises(BadIncidents, match="line 2: source 'mill-lame' .*nearest is 'mill-lane'"):
        refuse_unknown_sources(Path("i.csv"), found, ["mill-lane", "alder-ford"])
    refuse_unknown_sources(Path("i.csv"), found, ["mill-lame"])
