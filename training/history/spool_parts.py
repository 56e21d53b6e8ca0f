"""A Parquet history read by many hands: each file by one of them, then each source joined.

What comes of it is what one process makes of the same files. Where rows of two files would have
to be looked at together, because a source's files overlap in time or its rows are out of order,
nothing is kept, and the history is for one process to read.
"""

from __future__ import annotations

import shutil
import tempfile
from collections import Counter
from dataclasses import dataclass, field
from functools import partial
from itertools import pairwise
from pathlib import Path

from scoring.channels import ChannelTable
from training.hands import Hands
from training.history.exclusions import Exclusion
from training.history.files import is_parquet
from training.history.long_cells import is_long
from training.history.options import BadHistory, HistoryOptions
from training.history.reading import Advances, open_cells, read_history
from training.history.spool import Fill, Spool
from training.history.tally import Tally


@dataclass(frozen=True, slots=True)
class Reading:
    """How files are read. folder: where pieces go; everybody who reads sees it."""

    table: ChannelTable
    options: HistoryOptions
    exclusions: tuple[Exclusion, ...]
    folder: Path


@dataclass(frozen=True, slots=True)
class Piece:
    """One source's rows of one file, in order of time, in a file of their own."""

    path: Path
    n: int
    first_ns: int
    last_ns: int


@dataclass(slots=True)
class Part:
    """What came of one file. bad: place and words of its refusal."""

    tally: Tally
    pieces: dict[str, Piece] = field(default_factory=dict)
    excluded: Counter[str] = field(default_factory=Counter)
    excluded_of: Counter[str] = field(default_factory=Counter)
    in_order: bool = True
    bad: tuple[str, str] | None = None


def parts_read_by(
    hands: Hands,
    table: ChannelTable,
    options: HistoryOptions,
    progress: Advances | None = None,
) -> Fill:
    """Return who fills a spool with files read by many hands, if each can be read by itself.

    That holds for Parquet in the wide form. Raises BadHistory as one process would, for the
    first of the files that cannot be read, and NoCluster.
    """

    def fill(
        files: list[Path], spool: Spool, exclusions: tuple[Exclusion, ...], tally: Tally
    ) -> bool:
        if not all(
            is_parquet(f) and not is_long(open_cells(f, options), options, table) for f in files
        ):
            return False
        reading = Reading(table, options, exclusions, spool.place)
        return _read_parts(files, reading, spool, tally, hands, progress)

    return fill


def _read_parts(
    files: list[Path],
    reading: Reading,
    spool: Spool,
    tally: Tally,
    hands: Hands,
    progress: Advances | None,
) -> bool:
    """Fill an empty spool, which the caller finishes; False if rows must be looked at together."""
    hands.must_see(reading.folder)
    parts = []
    # Others work in other folders.
    files = [file.absolute() for file in files]
    for file, part in zip(files, hands.each(partial(_read, reading), files), strict=True):
        if part.bad is not None:
            raise BadHistory(*part.bad)
        parts.append(part)
        if progress is not None:
            progress.advance(file.stat().st_size)
    pieces: dict[str, list[Piece]] = {}
    for part in parts:
        for source, piece in part.pieces.items():
            pieces.setdefault(source, []).append(piece)
    pieces = {source: sorted(of, key=lambda p: p.first_ns) for source, of in pieces.items()}
    apart = all(a.last_ns < b.first_ns for of in pieces.values() for a, b in pairwise(of))
    if not apart or not all(part.in_order for part in parts):
        for of in pieces.values():
            for piece in of:
                piece.path.unlink()
        return False
    for part in parts:
        tally.take(part.tally)
        spool.report.excluded.update(part.excluded)
        spool.report.excluded_of.update(part.excluded_of)
    joined = hands.each(partial(_join, reading.folder), list(pieces.values()))
    for (source, of), path in zip(pieces.items(), joined, strict=True):
        spool.adopt(source, path, sum(piece.n for piece in of), of[0].first_ns, of[-1].last_ns)
        for piece in of:
            piece.path.unlink(missing_ok=True)
    return True


def _read(reading: Reading, file: Path) -> Part:
    part = Part(Tally())
    if not file.exists():
        what = "a worker does not see it; history must have the same name on all machines"
        part.bad = (str(file), what)
        return part
    with Spool(len(reading.table.instruments), reading.folder) as spool:
        try:
            for batch in read_history([file], reading.table, reading.options, part.tally):
                spool.add(batch, reading.exclusions, part.tally)
            spool.finish(part.tally)
        except BadHistory as error:
            part.bad = (error.place, error.what)
            return part
        part.excluded = spool.report.excluded
        part.excluded_of = spool.report.excluded_of
        for source in spool.sources:
            path, in_order = spool.file_of(source)
            part.in_order &= in_order
            kept = path.rename(_new_file(reading.folder))
            first_ns, last_ns = spool.first_last_ns(source)
            part.pieces[source] = Piece(kept, spool.n_records(source), first_ns, last_ns)
    return part


def _join(folder: Path, pieces: list[Piece]) -> Path:
    """Return a new file with the pieces' rows; they stay, in case this has to be done again."""
    path = _new_file(folder)
    with path.open("wb") as out:
        for piece in pieces:
            with piece.path.open("rb") as file:
                shutil.copyfileobj(file, out, 1 << 20)
    return path


def _new_file(folder: Path) -> Path:
    with tempfile.NamedTemporaryFile(dir=folder, suffix=".rows", delete=False) as file:
        return Path(file.name)
