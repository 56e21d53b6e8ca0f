"""Every key is known by its variable and told in a comment: unit, range, effect."""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import Any

import pytest
from pydantic import BaseModel
from pydantic.fields import FieldInfo

from config import known, read_shipped, shipped_names
from service.settings import Settings
from training.nightly_settings import NightlySettings
from training.settings import LearnSettings

KINDS: dict[str, type[BaseModel]] = {
    "service.toml": Settings,
    "learn.toml": LearnSettings,
    "nightly.toml": NightlySettings,
}
NUMBER = re.compile(r"\d+\^\d+|\d[\d ]*(?:\.\d+)?(?:e\d+)?")


def fields(kind: type[BaseModel]) -> Iterator[tuple[tuple[str, str], FieldInfo]]:
    """Yield every ((section, key), field)."""
    for section, whole in kind.model_fields.items():
        for key, field in type(whole.default).model_fields.items():
            yield (section, key), field


def numbers(comment: str) -> set[float]:
    """Return the numbers in a comment; spaces may part thousands."""
    found = set()
    for text in NUMBER.findall(comment):
        bare = text.replace(" ", "")
        base, _, power = bare.partition("^")
        found.add(float(base) ** float(power) if power else float(bare))
    return found


def bounds(field: FieldInfo) -> set[float]:
    """Return the ends of a number's range."""
    found: list[Any] = []
    for one in field.metadata:
        found += [getattr(one, name, None) for name in ("ge", "gt", "le", "lt")]
    return {float(bound) for bound in found if bound is not None}


@pytest.mark.parametrize("name", KINDS)
def test_the_shipped_file_has_every_key_and_no_other(name: str) -> None:
    assert set(known.comments_of(name)) == {key for key, _ in fields(KINDS[name])}
    assert name in shipped_names()


@pytest.mark.parametrize("name", KINDS)
def test_every_key_has_a_comment_and_every_number_its_range(name: str) -> None:
    comments = known.comments_of(name)
    wrong = [
        f"{'.'.join(key)}: {sorted(bounds(field) - numbers(comments[key]))} not in its comment"
        for key, field in fields(KINDS[name])
        if not comments[key] or bounds(field) - numbers(comments[key])
    ]
    assert not wrong, "\n".join(wrong)


@pytest.mark.parametrize("name", KINDS)
def test_every_file_says_in_its_head_what_wins_over_what(name: str) -> None:
    head = " ".join(read_shipped(name).split("\n\n")[0].replace("#", "").split())
    section, key = next(iter(known.comments_of(name)))
    assert known.variable_of(name, section, key).startswith("ODDBRANCH_")
    assert f"ODDBRANCH_{known.OWNERS[name]}SECTION__KEY" in head
    for words in ("wins over", "this file", "default", "oddbranch settings"):
        assert words in head


def test_variables_are_told_apart_by_file() -> None:
    assert "ODDBRANCH_SERVER__PORT" in known.known_variables()
    assert "ODDBRANCH_SERVER__TLS_KEY" in known.known_variables()
    assert "ODDBRANCH_LEARN__BUDGET__ALERTS_PER_DAY" in known.known_variables()
    assert "ODDBRANCH_NIGHTLY__MODELS__KEEP" in known.known_variables()


@pytest.mark.parametrize(
    ("name", "says"),
    [
        ("ODDBRANCH_SERVER__PROT", "is ODDBRANCH_SERVER__PORT meant?"),
        ("ODDBRANCH_NIGTHLY__MODELS__KEEP", "is ODDBRANCH_NIGHTLY__MODELS__KEEP meant?"),
        ("ODDBRANCH_LEARN__BUDGET__ALERTS", "is ODDBRANCH_LEARN__BUDGET__ALERTS_PER_DAY meant?"),
        ("ODDBRANCH_QQQ", "`oddbranch settings` names them all"),
    ],
)
def test_a_misspelt_variable_is_named_with_the_nearest(name: str, says: str) -> None:
    assert known.misspelt({name: "1", "PATH": "/"}) == f"environment: {name} is not known; {says}"


def test_known_variables_and_those_of_others_are_let_be() -> None:
    given = {"ODDBRANCH_TEST_ALL": "1", "oddbranch_server__port": "1", "HOME": "/"}
    assert known.misspelt(given) is None


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("postgresql://me:hush@db/odd", "postgresql://me:***@db/odd"),
        ("postgresql://me:hu/s:h@x@db/odd", "postgresql://me:***@db/odd"),
        ("postgresql://me@db/odd", "postgresql://me@db/odd"),
        ("postgresql://db/odd?user=me&password=hush&x=1", "postgresql://db/odd?user=me&password=***&x=1"),
        ("postgresql://[::1]:5432/odd", "postgresql://[::1]:5432/odd"),
        ("data", "data"),
    ],
)  # fmt: skip
def test_a_password_is_masked_and_nothing_else(text: str, shown: str) -> None:
    assert known.masked(text) == shown
