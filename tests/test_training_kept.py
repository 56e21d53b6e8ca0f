"""Kept models: published whole, switched in one step, removed with care."""

from __future__ import annotations

import multiprocessing
import os
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from scoring.artefact import read_model
from scoring.errors import BadArtefact
from scoring.model import Model
from tests.models import a_model
from training.kept import BusyModels, Kept, KeptModels, NoSuchModel

NIGHT = datetime(2026, 12, 1, 2, 15, tzinfo=UTC)


def other_model(record_level: float) -> Model:
    """Return a model with another level, and so another name."""
    model = a_model()
    return replace(model, levels=replace(model.levels, record=record_level))


def published(folder: Path, n: int) -> tuple[KeptModels, list[Kept]]:
    """Publish some different models, one a night."""
    models = KeptModels(folder)
    with models.lock():
        kept = [models.publish(other_model(10.0 + i), NIGHT + timedelta(days=i)) for i in range(n)]
    return models, kept


def test_a_published_model_is_in_use_through_the_link(tmp_path: Path) -> None:
    models, (kept,) = published(tmp_path / "models", 1)
    assert kept.path.name == f"20261201T021500Z-{kept.name}"
    assert models.current() == kept
    assert read_model(tmp_path / "models" / "current").name == kept.name
    assert str((tmp_path / "models" / "current").readlink()) == kept.path.name
    there = {path.name for path in (tmp_path / "models").iterdir()}
    assert there == {".lock", "current", kept.path.name}


def test_the_link_is_there_at_every_moment_of_a_switch(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    models, (first,) = published(tmp_path, 1)
    seen: list[str] = []
    replace_file = Path.replace

    def watched(self: Path, target: Path) -> Path:
        seen.append(read_model(tmp_path / "current").name)
        done = replace_file(self, target)
        seen.append(read_model(tmp_path / "current").name)
        return done

    monkeypatch.setattr(Path, "replace", watched)
    second = models.publish(other_model(99.0), NIGHT + timedelta(days=1))
    assert seen == [first.name, second.name]


def test_models_are_listed_in_the_order_they_were_published(tmp_path: Path) -> None:
    models, kept = published(tmp_path, 3)
    (tmp_path / "notes").mkdir()
    (tmp_path / "20261201T021500Z-").mkdir()
    (tmp_path / "20261301T021500Z-0123").mkdir()
    assert list(models.kept()) == kept


def test_two_models_of_one_second_are_two_directories_in_order(tmp_path: Path) -> None:
    models = KeptModels(tmp_path)
    first, second = (models.publish(a_model(), NIGHT) for _ in range(2))
    assert first.path != second.path
    assert models.kept() == (first, second)
    assert models.current() == second


def test_an_empty_folder_has_no_models(tmp_path: Path) -> None:
    models = KeptModels(tmp_path / "nowhere")
    assert (models.kept(), models.current()) == ((), None)
    with pytest.raises(NoSuchModel, match="no model is in use"):
        models.back()


def test_going_back_uses_the_one_published_before(tmp_path: Path) -> None:
    models, kept = published(tmp_path, 3)
    assert models.back() == kept[1]
    assert models.back() == kept[0]
    with pytest.raises(NoSuchModel, match="is the oldest kept model"):
        models.back()
    assert models.current() == kept[0]


def test_going_back_passes_over_copies_of_the_one_in_use(tmp_path: Path) -> None:
    models, kept = published(tmp_path, 2)
    copy = models.publish(other_model(11.0), NIGHT + timedelta(days=5))
    assert copy.name == kept[1].name
    assert models.back() == kept[0]
    only = KeptModels(tmp_path / "copies")
    last = [only.publish(other_model(10.0), NIGHT) for _ in range(2)][1]
    with pytest.raises(NoSuchModel, match="is the oldest kept model"):
        only.back()
    assert only.current() == last


def test_a_prepared_model_that_is_dropped_leaves_nothing(tmp_path: Path) -> None:
    models, kept = published(tmp_path, 1)
    there = sorted(tmp_path.iterdir())
    models.prepare(other_model(12.0))
    models.drop_prepared()
    assert sorted(tmp_path.iterdir()) == there
    assert models.current() == kept[0]


def test_a_model_is_named_by_the_beginning_of_its_hash_or_its_directory(tmp_path: Path) -> None:
    models, kept = published(tmp_path, 2)
    assert models.use(kept[0].name[:8]) == kept[0] == models.current()
    assert models.use(kept[1].path.name) == kept[1]
    assert models.use("20261201") == kept[0]


@pytest.mark.parametrize(
    ("wanted", "says"),
    [
        ("zzz", "no kept model 'zzz'; `oddbranch models list`"),
        ("", "no kept model ''"),
        ("2026", "'2026' may be 20261201.*20261202.*give more"),
    ],
)
def test_a_name_that_is_none_or_several_is_refused(tmp_path: Path, wanted: str, says: str) -> None:
    models, kept = published(tmp_path, 2)
    with pytest.raises(NoSuchModel, match=says):
        models.use(wanted)
    assert models.current() == kept[1]


def test_a_damaged_model_is_not_put_into_use(tmp_path: Path) -> None:
    models, kept = published(tmp_path, 2)
    (kept[0].path / "tables.npz").write_bytes(b"short")
    with pytest.raises(BadArtefact, match="does not match the checksum"):
        models.back()
    assert models.current() == kept[1]


def test_the_oldest_are_removed_and_never_the_one_in_use(tmp_path: Path) -> None:
    models, kept = published(tmp_path, 5)
    models.use(kept[0].name)
    assert models.prune(2) == (kept[1], kept[2])
    assert models.kept() == (kept[0], kept[3], kept[4])
    assert models.prune(10) == ()
    assert not list(tmp_path.glob(".gone*"))


def _hold(folder: str, held: multiprocessing.synchronize.Event, ends: object) -> None:
    with KeptModels(Path(folder)).lock():
        held.set()
        ends.wait(30)  # type: ignore[attr-defined]  # an Event too


def test_a_second_job_leaves_with_a_sentence_and_a_third_may_come_after(tmp_path: Path) -> None:
    # A lock of the operating system: another process, not another thread.
    processes = multiprocessing.get_context("spawn")
    held, ends = processes.Event(), processes.Event()
    other = processes.Process(target=_hold, args=(str(tmp_path), held, ends))
    other.start()
    try:
        assert held.wait(30)
        with (
            pytest.raises(BusyModels, match=rf"another job \(process {other.pid}\)"),
            KeptModels(tmp_path).lock(),
        ):
            pass
    finally:
        ends.set()
        other.join(30)
    with KeptModels(tmp_path).lock():
        assert (tmp_path / ".lock").read_text() == str(os.getpid())


def test_what_a_killed_job_left_is_cleared_away_and_the_rest_is_not(tmp_path: Path) -> None:
    models, kept = published(tmp_path, 1)
    for name in (".incoming", "..incoming-x1", ".gone-old"):
        (tmp_path / name).mkdir()
        (tmp_path / name / "tables.npz").write_bytes(b"half")
    (tmp_path / ".current").symlink_to("nowhere")
    with models.lock():
        left = {p.name for p in tmp_path.iterdir()}
    assert left == {".lock", ".current", "current", kept[0].path.name}
    assert models.publish(other_model(50.0), NIGHT) == models.current()


def test_what_a_model_says_of_itself_is_read_and_a_damaged_one_says_nothing(
    tmp_path: Path,
) -> None:
    _, (kept,) = published(tmp_path, 1)
    assert kept.about() == {"n": 1}
    assert kept.sources() == ("a",)
    (kept.path / "model.json").write_text("[]", encoding="utf-8")
    assert kept.about() == {}
    assert kept.sources() == ()
