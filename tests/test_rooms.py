"""The rules of the rooms: who may import what, read from every file's syntax tree."""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.conftest import ROOT

ROOMS = ("scoring", "training", "service", "config")
OWN = {*ROOMS, "oddbranch", "tests"}

# A file of scoring imports only from files that stand before it here.
SCORING_ORDER = (
    "errors",
    "compiled",
    "channels",
    "derived",
    "bins",
    "tree",
    "stillness",
    "delays",
    "model",
    "kernels",
    "density",
    "expected",
    "excess",
    "sustained",
    "standing",
    "runs",
    "scorer",
    "artefact",
    "alert_settings",
    "alert_kernel",
    "alert_rules",
    "alerts",
    "alert_standing",
    "alert_turn",
    "sentences",
    "suspicion",
    "channel_alerts",
    "attend",
    "episodes",
    "alert_actions",
    "flood",
)

# What each room may import beside the standard library.
THIRD_PARTY = {
    "scoring": {"numpy", "numba", "pydantic"},
    "training": {
        *("numpy", "numba", "scipy", "pandas", "pyarrow", "pydantic", "pydantic_settings"),
        *("click", "rich", "orjson", "sqlalchemy", "dask", "distributed", "matplotlib"),
    },
    "service": {
        *("numpy", "numba", "pydantic", "pydantic_settings", "pydantic_core", "fastapi"),
        "starlette",
        *("uvicorn", "uvloop", "httptools", "orjson", "prometheus_client", "sqlalchemy"),
        *("alembic", "click", "psycopg"),
    },
    "config": set[str](),
    "oddbranch": {"click"},
}

# Which other rooms each room may import.
OWN_ROOMS = {
    "scoring": {"scoring"},
    "training": {"training", "scoring", "config"},
    "service": {"service", "scoring", "config"},
    "config": {"config"},
    "oddbranch": {"scoring"},
}

# scoring is pure: it neither talks to a network nor asks the clock or the environment.
IMPURE_MODULES = {
    *("socket", "ssl", "http", "urllib", "asyncio", "selectors", "subprocess", "time"),
    *("random", "secrets", "getpass", "logging", "sqlite3"),
}
IMPURE_CALLS = {"now", "utcnow", "today", "getenv"}
IMPURE_NAMES = {"environ", "environb"}

MAX_MODULE_LINES = 400

# A longer module has its reason here.
LONG_MODULES: dict[str, str] = {
    "scoring/kernels.py": "one loop over rows and its parts, which the compiler sees as one",
}


def room_files(room: str) -> list[Path]:
    """Return the files of a room, or the one file of that name."""
    if room == "oddbranch":
        return [ROOT / "oddbranch.py"]
    return sorted((ROOT / room).rglob("*.py"))


def tree_of(path: Path) -> ast.Module:
    """Return a file's syntax tree."""
    return ast.parse(path.read_text(encoding="utf-8"), str(path))


def imports(tree: ast.AST) -> Iterator[tuple[str, int]]:
    """Yield every module that a tree imports, and the line."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node.lineno) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "relative imports hide which room they reach into"
            module = node.module or ""
            # `from scoring import tree` imports the module scoring.tree.
            if module in ROOMS:
                yield from ((f"{module}.{alias.name}", node.lineno) for alias in node.names)
            else:
                yield module, node.lineno


def own_module(path: Path) -> str:
    """Return the dotted name of one of our files."""
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(part for part in parts if part != "__init__")


@pytest.mark.parametrize("room", [*ROOMS, "oddbranch"])
def test_a_room_imports_only_what_its_row_allows(room: str) -> None:
    allowed = OWN_ROOMS[room] | THIRD_PARTY[room] | sys.stdlib_module_names
    wrong = [
        f"{path.relative_to(ROOT)}:{line} imports {module}"
        for path in room_files(room)
        for module, line in imports(tree_of(path))
        if module.split(".")[0] not in allowed
    ]
    assert not wrong, "\n".join(wrong)


def test_nothing_of_ours_imports_the_tests() -> None:
    files = [path for room in [*ROOMS, "oddbranch"] for path in room_files(room)]
    assert not [p for p in files for m, _ in imports(tree_of(p)) if m.split(".")[0] == "tests"]


def test_scoring_is_a_stated_order_without_cycles() -> None:
    names = {path.stem for path in room_files("scoring")} - {"__init__"}
    assert names == set(SCORING_ORDER), "SCORING_ORDER names the files of scoring, each once"
    wrong = []
    for number, name in enumerate(SCORING_ORDER):
        before = {f"scoring.{earlier}" for earlier in SCORING_ORDER[:number]}
        for module, line in imports(tree_of(ROOT / "scoring" / f"{name}.py")):
            if module.startswith("scoring") and module not in before:
                wrong.append(f"scoring/{name}.py:{line} imports {module}, which comes later")
    assert not wrong, "\n".join(wrong)


def test_scoring_asks_neither_clock_nor_environment_nor_network() -> None:
    wrong = []
    for path in room_files("scoring"):
        tree = tree_of(path)
        wrong += [
            f"{path.name}:{line} imports {module}"
            for module, line in imports(tree)
            if module.split(".")[0] in IMPURE_MODULES
        ]
        for node in ast.walk(tree):
            if isinstance(node, ast.Attribute) and node.attr in IMPURE_CALLS | IMPURE_NAMES:
                wrong.append(f"{path.name}:{node.lineno} reads {node.attr}")
    assert not wrong, "\n".join(wrong)


def test_no_function_imports_anything_of_ours() -> None:
    wrong = []
    for room in [*ROOMS, "oddbranch"]:
        for path in room_files(room):
            for node in ast.walk(tree_of(path)):
                if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
                    wrong += [
                        f"{path.relative_to(ROOT)}:{line} imports {module} inside {node.name}"
                        for module, line in imports(node)
                        if module.split(".")[0] in OWN
                    ]
    assert not wrong, "\n".join(wrong)


def test_the_store_knows_neither_the_web_nor_scoring() -> None:
    known = ("fastapi", "starlette", "scoring")
    # The family of refusals is shared by all rooms.
    wrong = [
        f"{path.relative_to(ROOT)}:{line} imports {module}"
        for path in sorted((ROOT / "service" / "store").rglob("*.py"))
        for module, line in imports(tree_of(path))
        if module.split(".")[0] in known and module != "scoring.errors"
    ]
    assert not wrong, "\n".join(wrong)


@pytest.mark.parametrize("room", [*ROOMS, "oddbranch"])
def test_every_module_says_in_a_few_lines_what_it_is_for(room: str) -> None:
    wrong = []
    for path in room_files(room):
        docstring = ast.get_docstring(tree_of(path)) or ""
        if not 1 <= len(docstring.splitlines()) <= 12:
            wrong.append(f"{path.relative_to(ROOT)}: {len(docstring.splitlines())} lines")
    assert not wrong, "\n".join(wrong)


@pytest.mark.parametrize("room", [*ROOMS, "oddbranch"])
def test_no_module_is_too_long_to_read(room: str) -> None:
    lengths = {p: len(p.read_text(encoding="utf-8").splitlines()) for p in room_files(room)}
    wrong = [f"{p.relative_to(ROOT)}: {n}" for p, n in lengths.items() if n > MAX_MODULE_LINES]
    wrong = [entry for entry in wrong if entry.split(":")[0] not in LONG_MODULES]
    assert not wrong, "\n".join(wrong)
