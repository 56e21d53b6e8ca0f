"""The model directory: there and back, whole or not at all, refused by name when damaged."""

from __future__ import annotations

import hashlib
import io
import json
import os
import threading
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings

from scoring import artefact
from scoring.artefact import MODEL_FORMAT, read_model, write_model
from scoring.channels import parse_channels
from scoring.delays import Delays
from scoring.density import surprise_of
from scoring.errors import BadArtefact
from scoring.model import Member, Model, Part
from scoring.scorer import Scorer
from tests.models import a_model, a_regime_model, some_records
from tests.strategies import members
from tests.trees import joint_states, random_tree


def same_members(a: Member, b: Member) -> None:
    """Check that two members hold the same."""
    assert (a.source, a.tables, a.regime, a.about) == (b.source, b.tables, b.regime, b.about)
    for left, right in zip(a.bins, b.bins, strict=True):
        np.testing.assert_array_equal(left.borders, right.borders)
        assert left.n_words == right.n_words
    for one, other in zip(a.parts, b.parts, strict=True):
        assert (one.key, one.log_share) == (other.key, other.log_share)
        np.testing.assert_array_equal(one.tree.edges, other.tree.edges)
        np.testing.assert_array_equal(one.tree.nats, other.tree.nats)
        for x, y in zip(one.tree.log_marginals, other.tree.log_marginals, strict=True):
            np.testing.assert_array_equal(x, y)
        for x, y in zip(one.tree.log_ratios, other.tree.log_ratios, strict=True):
            np.testing.assert_array_equal(x, y)
    for name in ("median", "high", "sustained", "channel_median", "channel_spread", "rows"):
        np.testing.assert_array_equal(getattr(a.usual, name), getattr(b.usual, name))


@pytest.mark.parametrize("model", [a_model(), a_regime_model()], ids=["plain", "regime"])
def test_a_model_comes_back_as_it_was(model: Model, tmp_path: Path) -> None:
    written = write_model(model, tmp_path / "model")
    back = read_model(tmp_path / "model")
    assert (back.table, back.levels, back.about) == (model.table, model.levels, model.about)
    assert back.name == written.name
    assert len(back.name) == 16
    same_members(back.fleet, model.fleet)
    assert set(back.members) == set(model.members)
    for source, member in model.members.items():
        same_members(back.members[source], member)


@given(members())
@settings(max_examples=15, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_member_scores_the_same_after_a_round_trip(tmp_path: Path, member: Member) -> None:
    channels = [
        {"name": f"c{k}", "kind": "state", "words": ["w" * (j + 1) for j in range(b.n_words)]}
        if b.n_words
        else {"name": f"c{k}"}
        for k, b in enumerate(member.bins)
    ]
    table = parse_channels({"channel": channels}, "test")
    model = Model(table, {"a": member}, replace(member, source=""), a_model().levels)
    write_model(model, tmp_path / "model")
    back = read_model(tmp_path / "model").members["a"]
    rows = joint_states([b.n_bins for b in member.bins])
    np.testing.assert_array_equal(surprise_of(back, rows), surprise_of(member, rows))


def test_a_model_read_back_scores_to_the_last_bit(tmp_path: Path) -> None:
    model = a_model()
    write_model(model, tmp_path / "model")
    times_ns, values = some_records(1, 40)
    ours, _ = Scorer(model).score("a", times_ns, values, None)
    back, _ = Scorer(read_model(tmp_path / "model")).score("a", times_ns, values, None)
    np.testing.assert_array_equal(ours.excess, back.excess)
    np.testing.assert_array_equal(ours.channel_surprise, back.channel_surprise)


def test_a_forest_without_edges_comes_back(tmp_path: Path) -> None:
    model = a_model()
    bare = random_tree(3, [b.n_bins for b in model.fleet.bins], edges=[])
    fleet = replace(model.fleet, parts=(Part(bare),))
    write_model(replace(model, fleet=fleet, members={}), tmp_path / "model")
    same_members(read_model(tmp_path / "model").fleet, fleet)


def test_the_name_is_that_of_the_content_alone(tmp_path: Path) -> None:
    model = a_model()
    first = write_model(model, tmp_path / "a").name
    assert write_model(replace(model, about={"host": "elsewhere"}), tmp_path / "b").name == first
    other = replace(model, levels=replace(model.levels, record=12.5))
    assert write_model(other, tmp_path / "c").name != first
    tree = model.fleet.parts[0].tree
    tables = (tree.log_ratios[0] + 1e-12, *tree.log_ratios[1:])
    fleet = replace(model.fleet, parts=(Part(replace(tree, log_ratios=tables)),))
    assert write_model(replace(model, fleet=fleet), tmp_path / "d").name != first


def test_delays_are_held_where_a_site_has_set_them(tmp_path: Path) -> None:
    model = a_model()
    bare = write_model(model, tmp_path / "a").name
    # What was left alone is not written, so that models without delays keep their names.
    assert "delays" not in (tmp_path / "a" / "model.json").read_text(encoding="utf-8")
    levels = replace(model.levels, delays=Delays(deadband=0.25))
    assert write_model(replace(model, levels=levels), tmp_path / "b").name != bare
    assert read_model(tmp_path / "b").levels == levels


def test_writing_over_a_model_replaces_it_and_leaves_nothing_beside(tmp_path: Path) -> None:
    model = a_model()
    write_model(model, tmp_path / "model")
    levels = replace(model.levels, record=99.0)
    write_model(replace(model, levels=levels), tmp_path / "model")
    assert read_model(tmp_path / "model").levels == levels
    assert [p.name for p in tmp_path.iterdir()] == ["model"]
    assert sorted(p.name for p in (tmp_path / "model").iterdir()) == ["model.json", "tables.npz"]


@pytest.mark.parametrize("at_once", [True, False])
def test_a_model_is_replaced_in_one_step_or_else_in_two(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, at_once: bool
) -> None:
    if not at_once:
        monkeypatch.setattr("ctypes.CDLL", lambda *_names, **_more: object())
    model, path = a_model(), tmp_path / "model"
    write_model(model, path)
    missing, done = [0], threading.Event()

    def look() -> None:
        while not done.is_set():
            missing[0] += not (path / "model.json").exists()

    looker = threading.Thread(target=look)
    looker.start()
    for k in range(60):
        levels = replace(model.levels, record=10.0 + k)
        write_model(replace(model, levels=levels), path)
    done.set()
    looker.join()
    assert read_model(path).levels.record == 69.0
    assert [p.name for p in tmp_path.iterdir()] == ["model"]
    if at_once:
        assert missing[0] == 0


def test_a_write_that_fails_leaves_the_old_model(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    model = a_model()
    name = write_model(model, tmp_path / "model").name

    def no_space(descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", no_space)
    with pytest.raises(BadArtefact, match="model: cannot be written: No space left on device"):
        write_model(replace(model, members={}), tmp_path / "model")
    monkeypatch.undo()
    assert read_model(tmp_path / "model").name == name
    assert [p.name for p in tmp_path.iterdir()] == ["model"]


@pytest.mark.parametrize("what", ["file", "folder"])
def test_something_else_at_the_place_is_left_alone(tmp_path: Path, what: str) -> None:
    path = tmp_path / "precious"
    if what == "file":
        path.write_text("mine", encoding="utf-8")
    else:
        path.mkdir()
        (path / "notes.txt").write_text("mine", encoding="utf-8")
    with pytest.raises(BadArtefact, match="precious: exists and is no model directory.*--out"):
        write_model(a_model(), path)
    assert path.exists()


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Return a model directory."""
    write_model(a_model(), tmp_path / "model")
    return tmp_path / "model"


def edit(folder: Path, **changes: Any) -> None:
    """Change keys of model.json."""
    path = folder / "model.json"
    data = json.loads(path.read_text(encoding="utf-8")) | changes
    path.write_text(json.dumps(data), encoding="utf-8")


def test_a_later_format_is_refused_by_name(folder: Path) -> None:
    edit(folder, format=99)
    says = f"model.json: has format 99; this version reads up to {MODEL_FORMAT}"
    with pytest.raises(BadArtefact, match=says):
        read_model(folder)


@pytest.mark.parametrize("place", [0, 100, -1])
def test_one_wrong_byte_in_the_tables_is_refused(folder: Path, place: int) -> None:
    path = folder / "tables.npz"
    data = bytearray(path.read_bytes())
    data[place] ^= 1
    path.write_bytes(data)
    with pytest.raises(BadArtefact, match="tables.npz: does not match the checksum"):
        read_model(folder)


def test_levels_edited_by_hand_are_refused(folder: Path) -> None:
    data = json.loads((folder / "model.json").read_text(encoding="utf-8"))
    edit(folder, levels=data["levels"] | {"record": 1e9})
    with pytest.raises(BadArtefact, match="model.json: does not match the model's name"):
        read_model(folder)


def test_what_is_said_about_a_model_may_change(folder: Path) -> None:
    data = json.loads((folder / "model.json").read_text(encoding="utf-8"))
    edit(folder, about=data["about"] | {"model": {"kept": "yes"}})
    assert read_model(folder).about == {"kept": "yes"}


@pytest.mark.parametrize("missing", ["model.json", "tables.npz"])
def test_a_directory_that_is_not_whole_says_what_makes_one(folder: Path, missing: str) -> None:
    (folder / missing).unlink()
    with pytest.raises(BadArtefact, match="is no model directory.*`oddbranch learn` makes one"):
        read_model(folder)


@pytest.mark.parametrize("text", ["", "{", "[]", "null", '"x"', "\x00"])
def test_a_file_that_is_no_model_is_refused(folder: Path, text: str) -> None:
    (folder / "model.json").write_text(text, encoding="utf-8")
    with pytest.raises(BadArtefact, match=r"model\.json: (cannot be read|has format None)"):
        read_model(folder)


def repack(folder: Path, **arrays: Any) -> None:
    """Write other arrays with a checksum that matches."""
    packed = io.BytesIO()
    np.savez(packed, **arrays)
    (folder / "tables.npz").write_bytes(packed.getvalue())
    edit(folder, tables_sha256=hashlib.sha256(packed.getvalue()).hexdigest())


def test_a_pickle_among_the_tables_is_not_opened(folder: Path) -> None:
    repack(folder, borders=np.array([{"a": 1}], dtype=object))
    with pytest.raises(BadArtefact, match="does not hold a whole model.*allow_pickle=False"):
        read_model(folder)


@pytest.mark.parametrize("data", [b"", b"PK\x03\x04 and no more", b"tables"])
def test_tables_that_are_no_archive_are_refused(folder: Path, data: bytes) -> None:
    (folder / "tables.npz").write_bytes(data)
    edit(folder, tables_sha256=hashlib.sha256(data).hexdigest())
    with pytest.raises(BadArtefact, match="does not hold a whole model"):
        read_model(folder)


@pytest.mark.parametrize("key", ["table", "levels", "members", "about"])
def test_a_key_that_is_gone_is_refused(folder: Path, key: str) -> None:
    path = folder / "model.json"
    data = json.loads(path.read_text(encoding="utf-8"))
    del data[key]
    # The name is made to match, so that the reading itself has to find out.
    with np.load(folder / "tables.npz") as stored:
        arrays = {name: stored[name] for name in stored.files}
    data["name"] = artefact._name(
        arrays, {k: v for k, v in data.items() if k not in artefact.NOT_NAMED}
    )
    path.write_text(json.dumps(data), encoding="utf-8")
    with pytest.raises(BadArtefact, match=f"does not hold a whole model.*{key}"):
        read_model(folder)


def test_tables_that_are_too_short_are_refused(folder: Path) -> None:
    with np.load(folder / "tables.npz") as stored:
        arrays = {name: stored[name] for name in stored.files}
    arrays["0.0.log_ratios"] = arrays["0.0.log_ratios"][:-1]
    repack(folder, **arrays)
    data = json.loads((folder / "model.json").read_text(encoding="utf-8"))
    name = artefact._name(arrays, {k: v for k, v in data.items() if k not in artefact.NOT_NAMED})
    edit(folder, name=name)
    with pytest.raises(BadArtefact, match="does not hold a whole model"):
        read_model(folder)
