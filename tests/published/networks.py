"""Public Bayesian networks from the files that pgmpy's wheel carries, as exact joints.

The files (pgmpy/utils/example_models/*.bif.gz, pgmpy 1.1) are read by a small parser of
our own; pgmpy itself is not imported here.
"""

from __future__ import annotations

import gzip
import importlib.util
import itertools
import re
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Words = NDArray[np.float64]


@dataclass(frozen=True)
class Network:
    """A discrete network.

    names, words: of each variable, in the file's order. parents: numbers of variables.
    tables: (words of each parent ..., own words) conditional probabilities.
    """

    names: tuple[str, ...]
    words: tuple[tuple[str, ...], ...]
    parents: tuple[tuple[int, ...], ...]
    tables: tuple[Floats, ...]

    @property
    def sizes(self) -> list[int]:
        """Number of words of each variable."""
        return [len(w) for w in self.words]

    def joint(self) -> Floats:
        """Return the exact joint, one axis a variable."""
        n = len(self.names)
        joint = np.ones(self.sizes)
        for node, table in enumerate(self.tables):
            axes = [*self.parents[node], node]
            order = np.argsort(axes)
            shape = [len(self.words[k]) if k in axes else 1 for k in range(n)]
            joint *= table.transpose(order.tolist()).reshape(shape)
        return joint

    def sample(self, rng: np.random.Generator, n: int) -> Words:
        """Return n records drawn parents first, (n, n_variables) numbers of words."""
        out = np.full((n, len(self.names)), -1.0)
        left = set(range(len(self.names)))
        while left:
            for node in sorted(left):
                if not left & set(self.parents[node]):
                    codes = tuple(out[:, p].astype(int) for p in self.parents[node])
                    below = np.cumsum(self.tables[node][codes].reshape(-1, self.sizes[node]), 1)
                    draw = rng.random((n, 1)) * below[:, -1:]
                    out[:, node] = (draw > below).sum(axis=1)
                    left.remove(node)
        return out


def folder() -> Path:
    """Return where the installed wheel keeps its networks."""
    spec = importlib.util.find_spec("pgmpy")
    assert spec is not None, "pgmpy is not installed; it is in the extra 'dev'"
    assert spec.submodule_search_locations
    return Path(spec.submodule_search_locations[0]) / "utils" / "example_models"


@cache
def load(name: str) -> Network:
    """Return one of the bundled networks."""
    with gzip.open(folder() / f"{name}.bif.gz", "rt", encoding="utf-8") as file:
        text = file.read()
    words = {
        found[1]: tuple(w.strip() for w in found[2].split(","))
        for found in re.finditer(r"variable\s+(\S+)\s*\{[^{]*\{([^}]*)\}", text)
    }
    names = tuple(words)
    parents: dict[str, tuple[int, ...]] = {}
    tables: dict[str, Floats] = {}
    for found in re.finditer(r"probability\s*\(([^)]*)\)\s*\{([^}]*)\}", text):
        own, _, rest = (part.strip() for part in found[1].partition("|"))
        above = [name.strip() for name in rest.split(",") if name.strip()]
        parents[own] = tuple(names.index(name) for name in above)
        tables[own] = _table(found[2], words[own], [words[name] for name in above])
    return Network(
        names,
        tuple(words.values()),
        tuple(parents[name] for name in names),
        tuple(tables[name] for name in names),
    )


def _table(body: str, own: tuple[str, ...], above: list[tuple[str, ...]]) -> Floats:
    table = np.full([*(len(w) for w in above), len(own)], np.nan)
    for line in filter(None, (part.strip() for part in body.split(";"))):
        if line.startswith("table"):
            table[:] = [float(x) for x in line.removeprefix("table").split(",")]
            continue
        given, numbers = re.fullmatch(r"\(([^)]*)\)\s*(.*)", line, re.DOTALL).groups()  # type: ignore[union-attr]
        at = tuple(w.index(g.strip()) for w, g in zip(above, given.split(","), strict=True))
        table[at] = [float(x) for x in numbers.split(",")]
    assert not np.isnan(table).any()
    # Files round their numbers to eight places; rows are made to sum to one.
    return np.asarray(table / table.sum(axis=-1, keepdims=True))


def pair(joint: Floats, a: int, b: int) -> Floats:
    """Return the joint of two of the variables, by first then second."""
    others = tuple(k for k in range(joint.ndim) if k not in (a, b))
    table = joint.sum(axis=others)
    return np.asarray(table if a < b else table.T)


def single(joint: Floats, a: int) -> Floats:
    """Return one variable's marginal."""
    return np.asarray(joint.sum(axis=tuple(k for k in range(joint.ndim) if k != a)))


def entropy(p: Floats) -> float:
    """Return the entropy of a law of any shape, nats."""
    p = p[p > 0]
    return float(-(p * np.log(p)).sum())


def labelled_trees(n: int) -> list[list[tuple[int, int]]]:
    """Return all n^(n - 2) labelled trees by their Pruefer sequences."""
    if n == 1:
        return [[]]
    found = []
    for sequence in itertools.product(range(n), repeat=n - 2):
        degree = [1 + sequence.count(k) for k in range(n)]
        edges = []
        for k in sequence:
            leaf = degree.index(1)
            edges.append((min(leaf, k), max(leaf, k)))
            degree[leaf], degree[k] = 0, degree[k] - 1
        last = [k for k in range(n) if degree[k] == 1]
        edges.append((last[0], last[1]))
        found.append(sorted(edges))
    return found
