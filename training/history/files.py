"""Which files a history is: paths, folders and patterns to a list of files, opened safely.

A file is known by its first bytes, not by its name: Parquet, gzip, or text.
"""

from __future__ import annotations

import difflib
import glob
import gzip
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import BinaryIO, cast

from training.history.options import BadHistory

SUFFIXES = (".csv", ".csv.gz", ".tsv", ".tsv.gz", ".txt", ".txt.gz", ".parquet", ".pq")

PARQUET_MAGIC = b"PAR1"
GZIP_MAGIC = b"\x1f\x8b"


def find_files(paths: Iterable[Path | str]) -> list[Path]:
    """Return the files that the paths name, each once, in the order given.

    A folder stands for the history files anywhere below it, by name; a path with `*`,
    `?` or `[` that is no file stands for those it matches. Raises BadHistory for a path
    with nothing behind it and for an empty file.
    """
    files: dict[Path, Path] = {}
    for path in paths:
        for file in _expand(Path(path)):
            files.setdefault(file.resolve(), file)
    if not files:
        raise BadHistory("history", "no file was named")
    for file in files.values():
        if file.is_file() and file.stat().st_size == 0:
            raise BadHistory(str(file), "empty file; a history has a heading and rows")
    return list(files.values())


def _expand(path: Path) -> list[Path]:
    if path.is_dir():
        found = sorted(p for p in path.rglob("*") if p.is_file() and p.name.endswith(SUFFIXES))
        if not found:
            raise BadHistory(
                str(path), f"no history in this folder; looked for names with {', '.join(SUFFIXES)}"
            )
        return found
    if path.exists():
        return [path]
    if any(sign in str(path) for sign in "*?["):
        # Path.glob takes no absolute pattern.
        names = glob.glob(str(path), recursive=True)  # noqa: PTH207
        matched = [Path(name) for name in sorted(names)]
        if not matched:
            raise BadHistory(str(path), "no file matches this pattern")
        return [file for match in matched for file in _expand(match)]
    raise BadHistory(str(path), "no such file" + _near_file(path))


def _near_file(path: Path) -> str:
    if not path.parent.is_dir():
        return f"; the folder {str(path.parent)!r} does not exist"
    names = [p.name for p in path.parent.iterdir()]
    near = difflib.get_close_matches(path.name, names, n=1)
    return f"; did you mean {str(path.with_name(near[0]))!r}?" if near else ""


def history_n_bytes(paths: Iterable[Path | str]) -> int:
    """Return the size on disk of a whole history: the total of a progress bar."""
    return sum(file.stat().st_size for file in find_files(paths))


def is_parquet(path: Path) -> bool:
    """True for a file that begins as Parquet does."""
    with open_binary(path) as file:
        return file.read(4) == PARQUET_MAGIC


@contextmanager
def open_binary(path: Path) -> Iterator[BinaryIO]:
    """Open a file for reading; what the system says against it becomes BadHistory."""
    try:
        file = path.open("rb")
    except OSError as error:
        raise BadHistory(str(path), f"cannot be read: {error.strerror}") from None
    with file:
        yield file


@contextmanager
def open_text_bytes(path: Path) -> Iterator[tuple[BinaryIO, BinaryIO]]:
    """Open a text file, unpacked if it is gzip'd.

    Yields the stream of text bytes, and the file below it, whose position tells how
    much of the file on disk has been read.
    """
    with open_binary(path) as raw:
        packed = raw.read(2) == GZIP_MAGIC
        raw.seek(0)
        if packed:
            with gzip.GzipFile(fileobj=raw) as unpacked:
                yield cast(BinaryIO, unpacked), raw
        else:
            yield raw, raw
