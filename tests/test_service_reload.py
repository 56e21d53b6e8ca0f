"""A new model is picked up between two requests; a broken one is not."""

from __future__ import annotations

import threading
from pathlib import Path

import pytest

from scoring.errors import BadArtefact
from tests.service_fakes import load_fake, write_fake
from tests.service_http import record, running

BEFORE, AFTER = "0123456789abcdef", "fedcba9876543210"


def test_a_new_model_answers_under_its_own_name(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        assert api.post(record(0)).json()["model"] == BEFORE
        write_fake(tmp_path / "model", AFTER)
        api.call(api.service.models.look())
        assert api.post(record(1)).json()["model"] == AFTER
        assert api.get("/health/ready").json()["model"] == AFTER


def test_a_broken_model_is_refused_and_the_old_one_goes_on(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with running(tmp_path) as api:
        write_fake(tmp_path / "model", "broken")
        for _ in range(3):
            api.call(api.service.models.look())
        assert api.post(record(0)).json()["model"] == BEFORE
        assert api.get("/health/ready").json()["model_refused"] == "see the log of the service"
        found = api.service.metrics.registry.get_sample_value
        assert found("oddbranch_model_reloads_total", {"outcome": "refused"}) == 1
        write_fake(tmp_path / "model", AFTER)
        api.call(api.service.models.look())
        assert api.post(record(1)).json()["model"] == AFTER
        assert api.get("/health/ready").json()["model_refused"] is None
    assert capsys.readouterr().err.count("model_refused") == 1


def test_a_model_that_went_away_leaves_the_old_one_in_use(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        (tmp_path / "model" / "model.json").unlink()
        api.call(api.service.models.look())
        assert api.post(record(0)).json()["model"] == BEFORE


def test_a_link_that_is_switched_is_a_new_model(tmp_path: Path) -> None:
    write_fake(tmp_path / "kept" / "a", BEFORE)
    write_fake(tmp_path / "kept" / "b", AFTER)
    (tmp_path / "model").symlink_to("kept/a")
    with running(tmp_path) as api:
        (tmp_path / "aside").symlink_to("kept/b")
        (tmp_path / "aside").rename(tmp_path / "model")
        api.call(api.service.models.look())
        assert api.post(record(0)).json()["model"] == AFTER


def test_no_model_at_the_start_is_refused(tmp_path: Path) -> None:
    (tmp_path / "model").mkdir()
    with pytest.raises(BadArtefact, match=r"no model\.json"), running(tmp_path):
        pass


def test_a_standing_of_another_model_starts_anew(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        for i in range(9):
            api.post(record(i, flow=200.0))
        write_fake(tmp_path / "model", AFTER)
        api.call(api.service.models.look())
        assert api.post(record(9, flow=200.0)).json()["sustained"] == pytest.approx(1.9)


def test_a_known_record_keeps_the_name_of_the_model_that_scored_it(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        first = api.post(record(0)).json()
        write_fake(tmp_path / "model", f"{AFTER} wide")
        api.call(api.service.models.look())
        again = api.post(record(0)).json()
        assert again["known"] is True
        assert (again["model"], again["excess"]) == (BEFORE, first["excess"])
        assert api.post(record(0, flow=3.0)).status_code == 409


def test_requests_under_way_are_neither_dropped_nor_mixed(tmp_path: Path) -> None:
    answers = []
    with running(tmp_path, load=load_fake) as api:

        def send() -> None:
            for i in range(150):
                answers.append(api.post([record(i, "a"), record(i, "b")]))

        sender = threading.Thread(target=send)
        sender.start()
        for i in range(40):
            write_fake(tmp_path / "model", (BEFORE, AFTER)[i % 2])
            api.call(api.service.models.look())
        sender.join()
    assert [answer.status_code for answer in answers] == [200] * 150
    names = [{item["model"] for item in answer.json()} for answer in answers]
    assert all(len(name) == 1 for name in names)
    assert {BEFORE, AFTER} == set().union(*names)
