"""README.md and DEVELOPERS.md say what is so: commands, figures, files, dependencies."""

from __future__ import annotations

import importlib.util
import re
import tomllib
from types import ModuleType

import pytest

from config import shipped_names
from oddbranch import COMMANDS
from scoring.channels import N_INPUTS, parse_channels
from tests.conftest import ROOT
from training.demo import FIGURE_SEED
from training.demo_plant import plant_config
from training.demo_text import METHOD_ROWS, OURS
from training.plant.incidents import KINDS
from training.plant.simulate import incidents_of

README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]


def block(name: str) -> list[str]:
    """Return the lines between the README's markers of one part of the demo."""
    met = re.search(rf"<!-- demo: {name} -->\n```text\n(.*?)```\n<!-- demo: end -->", README, re.S)
    assert met is not None, f"README.md has no place for the demo's {name}"
    return met[1].splitlines()


@pytest.fixture(scope="module")
def refresh() -> ModuleType:
    """Return the program that puts the demo's output into the README."""
    spec = importlib.util.spec_from_file_location("readme", ROOT / ".ci" / "readme.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_the_readme_opens_with_the_job_and_has_something_to_paste_by_line_30() -> None:
    lines = README.splitlines()
    assert lines[0] == "# oddbranch"
    paragraph = README.split("\n\n")[1]
    for word in ("fleet", "history", "instrument to walk to", "alerts", "each night", "advice"):
        assert word in paragraph
    assert "make demo ONCE=1" in lines[:30]


def test_the_tour_is_some_ten_lines_of_the_demo() -> None:
    tour = block("tour")
    assert 10 <= len(tour) <= 16
    commands = [line.split()[2] for line in tour if line.startswith("$ ")]
    assert commands == ["survey", "learn", "serve"]
    words = [line.split()[0] for line in tour]
    assert words.index("says") < words.index("truth")


def test_the_tables_are_the_demos_with_the_published_seed_and_every_incident() -> None:
    tables = block("tables")
    assert tables[0].startswith(f"Incidents by kind and size, seed {FIGURE_SEED}.")
    kinds = tuple(kind.replace("_", " ") for kind in KINDS)
    rows = [re.split(r" {2,}", line) for line in tables if line.startswith(kinds)]
    counted = [row for row in rows if row[2:3] and row[2].isdigit()]
    known = incidents_of(plant_config(FIGURE_SEED))
    assert sum(int(row[2]) for row in counted) == len(known)
    heading = next(line for line in tables if line.startswith("    ") and OURS in line)
    assert heading.split()[0] == OURS
    for name in METHOD_ROWS:
        assert any(line.startswith(name) for line in tables), name
    assert any(line.startswith("Budget: 2 alerts a day") for line in tables)
    assert any(line.startswith("smallest fault caught in 90 %") for line in tables)


def test_the_tour_and_the_tables_are_cut_from_the_output_alone(refresh: ModuleType) -> None:
    output = "\n".join(
        [
            *("the utility", "$ oddbranch survey h", "a table", "wrote c", "$ oddbranch learn h"),
            *("a tree", "levels for 2", "model x written", "", "$ oddbranch serve", "serving on u"),
            *("", "2024-07-27 05:29  a, over", "   says   f", "   truth  n", "2024-07-28 x"),
            *("", "Incidents by kind and size, seed 1", "rows", "", "Advice, not more", "end"),
        ]
    )
    assert refresh.tour(output).splitlines() == [
        *("$ oddbranch survey h", "wrote c", "$ oddbranch learn h", "levels for 2"),
        *("model x written", "$ oddbranch serve", "serving on u", "2024-07-27 05:29  a, over"),
        *("   says   f", "   truth  n"),
    ]
    assert refresh.tables(output) == "Incidents by kind and size, seed 1\nrows\n"


@pytest.mark.parametrize("text", [README, DEVELOPERS], ids=["README", "DEVELOPERS"])
def test_every_command_and_target_that_is_named_exists(text: str) -> None:
    commands = set(re.findall(r"(?:^|`)oddbranch ([a-z]+)", text, re.M))
    assert commands
    assert commands <= set(COMMANDS)
    targets = set(re.findall(r"(?:^|`)make ([a-z]+)", text, re.M))
    assert targets
    made = set(re.findall(r"^([a-z]+):", (ROOT / "Makefile").read_text(encoding="utf-8"), re.M))
    assert targets <= made


@pytest.mark.parametrize("text", [README, DEVELOPERS], ids=["README", "DEVELOPERS"])
def test_every_file_that_is_named_is_there(text: str) -> None:
    named = set(re.findall(r"`((?:scoring|training|service|config|deploy|tests)/[\w./-]*)`", text))
    assert named
    assert not [name for name in named if not (ROOT / name).exists()]


def test_every_command_is_in_the_readme_or_explains_itself_there() -> None:
    there = [
        n for n, (m, _, _) in COMMANDS.items() if (ROOT / f"{m.replace('.', '/')}.py").is_file()
    ]
    for name in ("survey", "learn", "serve", "nightly", "models", "score"):
        assert name in there
        assert f"oddbranch {name}" in README


def test_every_dependency_has_its_reason() -> None:
    wanted = [*PROJECT["dependencies"]]
    wanted += [one for extra in PROJECT["optional-dependencies"].values() for one in extra]
    names = {re.split(r"[\[>=;]", one)[0] for one in wanted}
    words = set(re.findall(r"[a-z][a-z-]+", DEVELOPERS))
    assert not names - words


def test_the_shipped_settings_are_named_where_they_are_used() -> None:
    for name in ("learn.toml", "nightly.toml", "service.toml"):
        assert name in shipped_names()


def test_the_cautions_say_what_it_is_not() -> None:
    cautions = " ".join(README[README.index("## Cautions") :].split())
    for words in (
        "not a protective function",
        "replaces no alarm, trip or interlock",
        "local codes and licensed practice decide",
        # IEC 61511: operator response counts only if independent, specific, dependable,
        # auditable (IEC 61511-3:2016 Annex C, from a secondary source).
        "IEC 61511",
        "independent, specific, dependable and auditable",
    ):
        assert words in cautions


def test_the_readmes_channel_table_is_one_and_shows_every_operation() -> None:
    met = re.search(r"<!-- channel table -->\n```toml\n(.*?)```", README, re.S)
    assert met is not None
    table = parse_channels(tomllib.loads(met[1]), "README.md")
    assert table.regime == ("pump",)
    assert table.names == ("flow", "suction", "discharge", "pump", "head")
    assert table.edges.require == (("flow", "head"),)
    for operation in N_INPUTS:
        assert operation in met[1]
