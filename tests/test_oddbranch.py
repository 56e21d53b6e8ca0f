"""The one command: its help, its exit codes, its one sentence for every refusal."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

import oddbranch
from tests.conftest import ROOT


def run(*words: str) -> subprocess.CompletedProcess[str]:
    """Run the command in a process of its own."""
    return subprocess.run(
        [sys.executable, ROOT / "oddbranch.py", *words],
        capture_output=True,
        text=True,
        check=False,
        timeout=60,
    )


def listed(help_text: str) -> list[str]:
    """Return the names of the commands in a help text."""
    lines = help_text.split("Commands:\n")[1].split("\n\n")[0].splitlines()
    return [line.split()[0] for line in lines if not line.startswith("   ")]


def test_help_lists_every_command_that_is_there_and_the_caution() -> None:
    result = CliRunner().invoke(oddbranch.cli, ["--help"])
    assert result.exit_code == 0
    there = [name for name, (module, _, _) in oddbranch.COMMANDS.items() if _has(module)]
    assert listed(result.output) == there
    assert "survey" in there
    assert oddbranch.ADVICE in " ".join(result.output.split())


def _has(module: str) -> bool:
    return (ROOT / Path(*module.split("."))).with_suffix(".py").is_file()


@pytest.mark.parametrize("name", oddbranch.COMMANDS)
def test_every_command_has_help_of_its_own(name: str) -> None:
    if not _has(oddbranch.COMMANDS[name][0]):
        assert name not in listed(CliRunner().invoke(oddbranch.cli, ["--help"]).output)
        return
    result = CliRunner().invoke(oddbranch.cli, [name, "--help"])
    assert result.exit_code == 0
    assert result.output.startswith("Usage: ")


def test_help_imports_no_heavy_library() -> None:
    code = (
        "import sys, oddbranch; from click.testing import CliRunner;"
        "assert CliRunner().invoke(oddbranch.cli, ['--help']).exit_code == 0;"
        "print([m for m in ('numpy', 'pandas', 'pyarrow', 'numba', 'fastapi') if m in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT
    )
    assert done.stdout.strip() == "[]"


def test_a_near_miss_gets_a_suggestion_and_exit_code_2() -> None:
    done = run("survye")
    assert done.returncode == 2
    assert "no command 'survye'; did you mean 'survey'?" in done.stderr


def test_an_unknown_command_gets_the_list() -> None:
    done = run("zzz")
    assert done.returncode == 2
    assert "there are survey" in done.stderr


def test_a_refusal_is_one_sentence_on_stderr_and_exit_code_1(tmp_path: Path) -> None:
    done = run("survey", str(tmp_path / "no.csv"), "--out", str(tmp_path / "c.toml"))
    assert (done.returncode, done.stdout) == (1, "")
    assert done.stderr == f"oddbranch: {tmp_path / 'no.csv'}: no such file\n"


def test_a_missing_argument_is_a_usage_error(tmp_path: Path) -> None:
    done = run("survey", "--out", str(tmp_path / "c.toml"))
    assert done.returncode == 2
    assert "Missing argument 'HISTORY...'" in done.stderr


def test_what_the_machine_refuses_is_one_sentence(tmp_path: Path) -> None:
    history = tmp_path / "h.csv"
    history.write_text("time,flow\n2026-12-01T04:00:00Z,1\n2026-12-01T04:00:10Z,2.5\n")
    done = run("survey", str(history), "--out", "/dev/full")
    assert done.returncode == 1
    assert done.stderr.startswith("oddbranch: ")
    assert done.stderr.count("\n") == 1


def test_version_names_the_command() -> None:
    assert run("--version").stdout.startswith("oddbranch ")


@pytest.mark.parametrize(
    ("words", "key"),
    [
        ([], "server.port = 8321  (default;"),
        (["service"], "server.port = 8321  (default;"),
        (["learn"], "budget.alerts_per_day = 2.0  (default;"),
        (["nightly"], "models.keep = 14  (default;"),
    ],
)
def test_settings_shows_what_is_in_force_in_each_file(words: list[str], key: str) -> None:
    done = CliRunner().invoke(oddbranch.cli, ["settings", *words])
    assert done.exit_code == 0
    assert key in done.output


def test_settings_refuses_a_misspelt_key_by_name(tmp_path: Path) -> None:
    path = tmp_path / "service.toml"
    path.write_text("[server]\nprot = 1\n", encoding="utf-8")
    done = run("settings", "--config", str(path))
    assert done.returncode == 1
    assert "server.prot is not known; is port meant?" in done.stderr
