"""The shipped Prometheus rules: their own cases pass, and the numbers they use exist."""

from __future__ import annotations

import re
import subprocess
from pathlib import Path
from typing import Any

import pytest
import yaml

from oddbranch import ADVICE
from tests.conftest import ROOT, need_program
from tests.service_http import record, running

FOLDER = ROOT / "deploy" / "prometheus"
RULES = FOLDER / "oddbranch.rules.yml"
CASES = (FOLDER / "oddbranch.rules_test.yml", FOLDER / "oddbranch.days_test.yml")
# Numbers that come from elsewhere: Prometheus itself, and the nightly job's text file.
NIGHTLY = {
    "oddbranch_nightly_verdict",
    "oddbranch_nightly_last_run_timestamp_seconds",
    "oddbranch_nightly_held_out_nats_per_reading",
}


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


def alerts() -> list[dict[str, object]]:
    """Return every rule that calls someone."""
    return [rule for rule in rules() if "alert" in rule]


def cases() -> list[dict[str, Any]]:
    """Return every named run of the case files."""
    return [test for path in CASES for test in yaml.safe_load(path.read_text())["tests"]]


def seconds(text: str) -> int:
    """Return a duration as Prometheus writes it, in seconds."""
    units = {"s": 1, "m": 60, "h": 3600, "d": 86_400}
    return sum(int(n) * units[unit] for n, unit in re.findall(r"(\d+)([smhd])", text))


def test_the_rules_are_rules_and_their_cases_pass() -> None:
    assert "SUCCESS" in promtool("check", "rules", RULES.name)
    passed = promtool("test", "rules", *(path.name for path in CASES))
    assert passed.count("SUCCESS") == len(CASES)


@pytest.mark.parametrize("alert", [str(rule["alert"]) for rule in alerts()])
def test_every_alert_has_cases_before_while_and_after(alert: str) -> None:
    """In one run: not firing, then firing, then cleared."""
    found = []
    for test in cases():
        asked = [one for one in test["alert_rule_test"] if one["alertname"] == alert]
        asked.sort(key=lambda one: seconds(one["eval_time"]))
        states = "".join("1" if one["exp_alerts"] else "0" for one in asked)
        found.append(re.fullmatch(r"0+1+0+", states) is not None)
    assert any(found)


def test_the_cases_fail_when_a_rule_is_wrong(tmp_path: Path) -> None:
    wrong = {
        "OddbranchPlantChanged": ("> 0.8\n", "> 0.95\n"),
        "OddbranchSuspectComesBack": (">= 3", ">= 9"),
        "OddbranchDown": ("== 0\n", "== 1\n"),
        "OddbranchSustainedOverLevel": ('max{kind="scored"} == 1\n', 'max{kind="scored"} == 2\n'),
        "OddbranchRecordsOverLevel": ("[10m]) == 1\n", "[10m]) == 2\n"),
        "OddbranchSourceSilent": ('max{kind="silent"} == 1\n', 'max{kind="silent"} == 2\n'),
        "OddbranchInstrumentsRaised": ("raised{kind!=", "quiet{kind!="),
    }
    text = RULES.read_text(encoding="utf-8")
    for old, new in wrong.values():
        assert text.count(old) == 1
        text = text.replace(old, new)
    (tmp_path / RULES.name).write_text(text, encoding="utf-8")
    touched = [
        test
        for test in cases()
        if any(one["alertname"] in wrong for one in test["alert_rule_test"])
    ]
    some = {"rule_files": [RULES.name], "evaluation_interval": "1m", "tests": touched}
    (tmp_path / "some.yml").write_text(yaml.safe_dump(some), encoding="utf-8")
    words = [need_program("promtool"), "test", "rules", "some.yml"]
    done = subprocess.run(words, capture_output=True, text=True, check=False, cwd=tmp_path)
    assert done.returncode != 0
    failed = set(re.findall(r"alertname: (\w+), time", done.stdout + done.stderr))
    assert failed == set(wrong)


def test_every_number_a_rule_uses_is_one_the_service_gives(tmp_path: Path) -> None:
    with running(tmp_path) as api:
        api.post(record(0))
        scraped = api.get("/metrics").text
    for rule in rules():
        names = set(re.findall(r"\boddbranch_\w+", str(rule["expr"])))
        recorded = set(re.findall(r"\boddbranch:[\w:]+", str(rule["expr"])))
        assert recorded <= {str(one.get("record")) for one in rules()}
        assert names or recorded or "up{" in str(rule["expr"])
        for name in names - NIGHTLY:
            assert re.search(rf"^{name}[ {{]", scraped, re.MULTILINE), name


@pytest.mark.parametrize("rule", alerts(), ids=lambda rule: str(rule["alert"]))
def test_every_alert_says_whom_it_calls_and_a_crew_that_it_is_advice(
    rule: dict[str, Any],
) -> None:
    assert rule["labels"]["audience"] in ("crew", "keeper")
    assert rule["labels"]["severity"] in ("advice", "warning", "critical")
    assert rule["annotations"]["summary"]
    assert rule["annotations"]["description"]
    if rule["labels"]["audience"] == "crew":
        advice = " ".join(str(rule["annotations"]["advice"]).lower().split())
        for words in ("no protective function", "local codes and licensed practice decide"):
            assert words in advice
            assert words in ADVICE


def test_the_shipped_configurations_are_taken_by_their_programs(tmp_path: Path) -> None:
    promtool("check", "config", "--syntax-only", "prometheus.yml")
    amtool = need_program("amtool")
    done = subprocess.run(
        [amtool, "check-config", FOLDER / "alertmanager.yml"], capture_output=True, check=False
    )
    assert done.returncode == 0, done.stdout


def test_every_audience_has_a_receiver() -> None:
    config = yaml.safe_load((FOLDER / "alertmanager.yml").read_text(encoding="utf-8"))
    assert [one["name"] for one in config["receivers"]] == ["crew", "keeper"]
    assert config["route"]["receiver"] == "keeper"
    names = {str(rule["alert"]) for rule in alerts()}
    for rule in config["inhibit_rules"]:
        for matcher in (*rule["source_matchers"], *rule["target_matchers"]):
            assert set(re.findall(r"Oddbranch\w+", matcher)) <= names
