"""The shipped Prometheus rules: their own cases pass, and the numbers they use exist."""

from __future__ import annotations

import re
import subprocess
from pathlib import Path

import pytest
import yaml

from oddbranch import ADVICE
from tests.conftest import ROOT, need_program
from tests.service_http import record, running

FOLDER = ROOT / "deploy" / "prometheus"
RULES = FOLDER / "oddbranch.rules.yml"
CASES = FOLDER / "oddbranch.rules_test.yml"


def promtool(*words: str | Path) -> str:
    """Run promtool; what it finds wrong is the test's failure."""
    program = need_program("promtool")
    done = subprocess.run(
        [program, *map(str, words)], capture_output=True, text=True, check=False, cwd=FOLDER
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


def rules() -> list[dict[str, object]]:
    """Return every rule."""
    groups = yaml.safe_load(RULES.read_text(encoding="utf-8"))["groups"]
    return [rule for group in groups for rule in group["rules"]]


def test_the_rules_are_rules_and_their_cases_pass() -> None:
    assert "SUCCESS" in promtool("check", "rules", RULES.name)
    assert "SUCCESS" in promtool("test", "rules", CASES.name)


def test_the_cases_fail_when_a_rule_is_wrong(tmp_path: Path) -> None:
    text = RULES.read_text(encoding="utf-8")
    (tmp_path / RULES.name).write_text(text.replace("> on", "< on"), encoding="utf-8")
    (tmp_path / CASES.name).write_text(CASES.read_text(encoding="utf-8"), encoding="utf-8")
    words = [need_program("promtool"), "test", "rules", CASES.name]
    done = subprocess.run(words, capture_output=True, text=True, check=False, cwd=tmp_path)
    assert done.returncode != 0


def test_every_number_a_rule_uses_is_one_the_service_gives(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        api.post(record(0))
        scraped = api.get("/metrics").text
    for rule in rules():
        names = set(re.findall(r"\boddbranch_\w+", str(rule["expr"])))
        assert names
        for name in names:
            assert re.search(rf"^{name}\{{", scraped, re.MULTILINE), name


@pytest.mark.parametrize("rule", rules(), ids=lambda rule: str(rule.get("alert")))
def test_every_alert_says_that_it_is_advice(rule: dict[str, object]) -> None:
    annotations = rule["annotations"]
    assert isinstance(annotations, dict)
    advice = " ".join(str(annotations["advice"]).lower().split())
    for words in ("no protective function", "local codes and licensed practice decide"):
        assert words in advice
        assert words in ADVICE
