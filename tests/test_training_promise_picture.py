"""The picture of a promise shows the chosen pair, the budget, and where data end."""

from __future__ import annotations

import re
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

from scoring.alert_settings import AlertSettings
from tests.streams import NEVER, held
from training.levels import curve_of, levels_at
from training.promise import Promise, promise_of
from training.promise_picture import promise_picture


@cache
def a_promise() -> Promise:
    with TemporaryDirectory() as folder:
        curve = curve_of(held(Path(folder)), NEVER, 1.5, AlertSettings())
    assert curve is not None
    return promise_of(curve, levels_at(curve, NEVER, 0.0), 1.5)


def test_the_picture_says_in_words_what_it_shows() -> None:
    promise = a_promise()
    (said,) = re.findall(r'aria-label="([^"]*)"', promise_picture(promise))
    assert f"chosen are {promise.sustained:.3g} nats for {promise.per_day():.3g} a day" in said


def test_budget_and_the_end_of_the_data_are_marked() -> None:
    picture = promise_picture(a_promise())
    assert "budget" in picture
    assert "highest seen" in picture
