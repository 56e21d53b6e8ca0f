"""Kept models: a folder of model directories and a link `current` to the one in use.

A model appears by rename and comes into use by one switch of the link, so that a reader
sees the old one or the new one and nothing between. A lock keeps jobs apart. Directories
are named by when the model was published and by its hash, so that a listing is in order.
"""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import shutil
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from scoring.artefact import read_model, write_model
from scoring.errors import OddbranchError
from scoring.model import Model

CURRENT = "current"
_LOCK = ".lock"
_INCOMING = ".incoming"
_STAMP = "%Y%m%dT%H%M%SZ"


class BusyModels(OddbranchError):
    """Another job changes these models now."""


class NoSuchModel(OddbranchError):
    """A name that is none or several of the kept models."""


@dataclass(frozen=True, slots=True)
class Kept:
    """One kept model. path: its directory. name: its hash. published: when, UTC."""

    path: Path
    name: str
    published: datetime

    @classmethod
    def of(cls, path: Path) -> Kept | None:
        """Return what a directory's name says; None for anything that is no kept model."""
        stamp, _, name = path.name.partition("-")
        try:
            published = datetime.strptime(stamp, _STAMP).replace(tzinfo=UTC)
        except ValueError:
            return None
        return cls(path, name, published) if name else None

    def about(self) -> dict[str, Any]:
        """Return the figures that the model carries for people; {} if it is damaged."""
        try:
            data = json.loads((self.path / "model.json").read_text(encoding="utf-8"))
            return dict(data["about"]["model"])
        except (OSError, ValueError, KeyError, TypeError):
            return {}

    def sources(self) -> tuple[str, ...]:
        """Return the sources with a member of their own; () if it is damaged."""
        try:
            data = json.loads((self.path / "model.json").read_text(encoding="utf-8"))
            return tuple(str(one["source"]) for one in data["members"] if one["source"])
        except (OSError, ValueError, KeyError, TypeError):
            return ()


class KeptModels:
    """The kept models of one folder, made when the first is published."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def kept(self) -> tuple[Kept, ...]:
        """Return the kept models, oldest first."""
        if not self.folder.is_dir():
            return ()
        paths = (p for p in self.folder.iterdir() if p.is_dir() and not p.is_symlink())
        found = [kept for kept in map(Kept.of, paths) if kept is not None]
        return tuple(sorted(found, key=lambda kept: (kept.published, kept.path.name)))

    def current(self) -> Kept | None:
        """Return the one in use, None where there is none."""
        try:
            target = Path(os.readlink(self.folder / CURRENT)).name  # noqa: PTH115 - not resolved
        except OSError:
            return None
        return next((kept for kept in self.kept() if kept.path.name == target), None)

    @contextlib.contextmanager
    def lock(self) -> Iterator[None]:
        """Keep other jobs away until the block ends; raises BusyModels at once if one is on."""
        self.folder.mkdir(parents=True, exist_ok=True)
        with (self.folder / _LOCK).open("a+") as file:
            try:
                fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                file.seek(0)
                who = file.read().strip() or "unknown"
                raise BusyModels(
                    f"{self.folder}: another job (process {who}) changes the kept models right "
                    "now; this one changed nothing, start it again later"
                ) from None
            file.truncate(0)
            file.write(str(os.getpid()))
            file.flush()
            # What a job that was killed left behind; nobody else is writing here.
            for left in self.folder.glob(".*"):
                if left.is_dir() and not left.is_symlink():
                    shutil.rmtree(left, ignore_errors=True)
            yield

    def publish(self, model: Model, now: datetime) -> Kept:
        """Write a model beside the others and use it; hold the lock meanwhile."""
        return self.publish_prepared(self.prepare(model).name, now)

    def prepare(self, model: Model) -> Model:
        """Write a model where nobody looks, and return it with its name; hold the lock.

        It comes into use by `publish_prepared`, or is gone when the next job begins.
        """
        return write_model(model, self.folder / _INCOMING)

    def publish_prepared(self, name: str, now: datetime) -> Kept:
        """Use the model that was prepared, by its name; hold the lock meanwhile."""
        path = self._path(name, now)
        (self.folder / _INCOMING).rename(path)
        _to_disk(self.folder)
        kept = Kept.of(path)
        assert kept is not None, "a name that publish wrote is one that Kept reads"
        self.switch(kept)
        return kept

    def drop_prepared(self) -> None:
        """Remove the model that was prepared: one in use already needs no further copy."""
        shutil.rmtree(self.folder / _INCOMING)

    def _path(self, name: str, now: datetime) -> Path:
        """Return a directory that is not there yet, later than all that are."""
        newest = max((kept.published for kept in self.kept()), default=now - timedelta(days=1))
        at = max(now, newest + timedelta(seconds=1)).astimezone(UTC)
        return self.folder / f"{at.strftime(_STAMP)}-{name}"

    def switch(self, kept: Kept) -> None:
        """Let `current` name a kept model, in one step."""
        aside = self.folder / f".{CURRENT}"
        aside.unlink(missing_ok=True)
        # Relative, so that the folder may be moved or mounted elsewhere.
        aside.symlink_to(kept.path.name)
        aside.replace(self.folder / CURRENT)
        _to_disk(self.folder)

    def use(self, wanted: str) -> Kept:
        """Use the kept model that a directory's or a hash's beginning names.

        Raises NoSuchModel, or BadArtefact for one that is damaged and so not put into use.
        """
        kept = choose(wanted, self.kept(), self.folder)
        read_model(kept.path)
        self.switch(kept)
        return kept

    def back(self) -> Kept:
        """Use the model published before the one in use; raises NoSuchModel.

        Earlier copies of the one in use are passed over: with them nothing would change.
        """
        current = self.current()
        if current is None:
            raise NoSuchModel(f"{self.folder}: no model is in use, so there is none before it")
        kept = self.kept()
        older = [k for k in kept[: kept.index(current)] if k.name != current.name]
        if not older:
            raise NoSuchModel(f"{self.folder}: {current.path.name} is the oldest kept model")
        return self.use(older[-1].path.name)

    def prune(self, n_keep: int) -> tuple[Kept, ...]:
        """Remove all but the newest n_keep and the one in use; return those removed."""
        current, kept = self.current(), self.kept()
        old = tuple(k for k in kept[: max(len(kept) - n_keep, 0)] if k != current)
        for one in old:
            # Out of the list in one step, then file by file.
            gone = one.path.with_name(f".gone-{one.path.name}")
            one.path.rename(gone)
            shutil.rmtree(gone, ignore_errors=True)
        return old


def choose(wanted: str, kept: Sequence[Kept], folder: Path) -> Kept:
    """Return the one model that a beginning names; raises NoSuchModel."""
    found = [k for k in kept if wanted and (k.path.name == wanted or k.name.startswith(wanted))]
    found = found or [k for k in kept if wanted and k.path.name.startswith(wanted)]
    # A model published twice is one model; the newer directory stands for it.
    if found and len({k.name for k in found}) == 1:
        return found[-1]
    if found:
        names = ", ".join(k.path.name for k in found)
        raise NoSuchModel(f"{folder}: {wanted!r} may be {names}; give more of the name")
    raise NoSuchModel(f"{folder}: no kept model {wanted!r}; `oddbranch models list` shows them")


def _to_disk(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
