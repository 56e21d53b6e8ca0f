"""From readings to scores: the whole way against slow twins, batches, standings, alerts."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scoring.bins import MISSING
from scoring.channels import ChannelTable
from scoring.derived import derive
from scoring.expected import shortest_interval
from scoring.model import Model
from scoring.scorer import ALERT_WORDS, RECORD_ALERT, SUSTAINED_ALERT, Scorer, Scores
from scoring.standing import Standing
from tests.models import a_model, a_regime_model, some_records
from tests.strategies import SEEDS
from tests.trees import hidden, slow_evidence, slow_member_evidence

S = 1_000_000_000
USUAL = np.array([[12.0, 14.0, 15.0, 0.0]])


@pytest.fixture(scope="module")
def scorer() -> Scorer:
    """Return a scorer of the small model."""
    return Scorer(a_model())


def joined(parts: list[Scores]) -> dict[str, np.ndarray]:
    """Return the arrays of several scores put together."""
    return {name: np.concatenate([getattr(p, name) for p in parts]) for name in Scores._fields}


def run(scorer: Scorer, excess_like: list[float], start: Standing | None = None) -> Scores:
    """Score usual records at the usual interval, `excess_like` of them."""
    at = np.arange(1, len(excess_like) + 1, dtype=np.int64) * 10 * S
    scores, _ = scorer.score("a", at, np.repeat(USUAL, len(at), axis=0), start)
    return scores


@pytest.mark.parametrize("model", [a_model(), a_regime_model()], ids=["plain", "regime"])
@given(SEEDS, st.data())
@settings(max_examples=25)
def test_one_by_one_through_bytes_equals_a_batch(
    model: Model, seed: int, data: st.DataObject
) -> None:
    scorer = Scorer(model)
    times_ns, values = some_records(seed, 9, gaps=0.2)
    whole, last = scorer.score("a", times_ns, values, None)
    cuts = sorted(data.draw(st.sets(st.integers(1, 8))))
    standing: Standing | None = None
    parts = []
    for a, b in zip([0, *cuts], [*cuts, 9], strict=True):
        part, standing = scorer.score("a", times_ns[a:b], values[a:b], standing)
        standing = Standing.from_bytes(standing.to_bytes())
        parts.append(part)
    for name, array in joined(parts).items():
        np.testing.assert_array_equal(array, getattr(whole, name), err_msg=name)
    assert standing is not None
    assert standing.to_bytes() == last.to_bytes()


@pytest.mark.parametrize("model", [a_model(), a_regime_model()], ids=["plain", "regime"])
def test_scores_equal_sums_over_every_joint_state(model: Model) -> None:
    member, scorer = model.members["a"], Scorer(model)
    start, nodes = model.derived_groups
    # Gaps are kept few: every missing node multiplies the states to sum over.
    times_ns, values = some_records(5, 12, gaps=0.1)
    scores, _ = scorer.score("a", times_ns, values, None)
    for r, row in enumerate(scores.rows):
        surprise = -slow_member_evidence(member, row.tolist())
        assert scores.surprise[r] == pytest.approx(surprise, rel=1e-9, abs=1e-9)
        own = np.full(4, np.nan)
        for i in range(4):
            if row[i] != MISSING:
                gone = nodes[start[i] : start[i + 1]].tolist()
                rest = -slow_member_evidence(member, hidden(row, i, *gone).tolist())
                own[i] = surprise - rest
        np.testing.assert_allclose(scores.channel_surprise[r], own, rtol=1e-8, atol=1e-8)
        beyond = own - member.usual.channel_median
        if np.all(np.isnan(own)):
            assert scores.suspect[r] == -1
            assert np.isnan(scores.suspect_surprise[r])
            continue
        assert scores.suspect[r] == np.nanargmax(beyond)
        assert scores.suspect_surprise[r] == scores.channel_surprise[r, scores.suspect[r]]


def test_bins_are_those_of_the_derived_readings(scorer: Scorer) -> None:
    times_ns, values = some_records(6, 20, gaps=0.0)
    times_ns = np.sort(times_ns) + np.arange(20) * S
    scores, _ = scorer.score("a", times_ns, values, None)
    table: ChannelTable = scorer.model.table
    usable = np.where(scores.usable, values, np.nan)
    nodes, _ = derive(table, times_ns, usable, None)
    np.testing.assert_array_equal(scores.rows, scorer.model.members["a"].bin_table.rows(nodes))


def test_what_should_have_been_read_is_the_interval_of_the_belief(scorer: Scorer) -> None:
    model = scorer.model
    member = model.members["a"]
    start, nodes = model.derived_groups
    times_ns, values = some_records(8, 12, gaps=0.05)
    scores, _ = scorer.score("a", times_ns, values, None)
    seen = set()
    for r, row in enumerate(scores.rows):
        i = int(scores.suspect[r])
        if i < 0 or scorer.instruments[i].is_state:
            assert np.isnan(scores.expected_low[r])
            continue
        bare = hidden(row, i, *nodes[start[i] : start[i + 1]].tolist())
        joint = []
        for b in range(member.bins[i].n_bins):
            bare[i] = b
            joint.append(np.exp(slow_evidence(member.parts[0].tree, bare.tolist())))
        belief = np.array(joint) / sum(joint)
        resolution = scorer.instruments[i].resolution or 0.0
        wanted = shortest_interval(belief, member.bins[i].borders, resolution)
        found = (scores.expected_low[r], scores.expected_high[r], scores.expected_best[r])
        assert found == pytest.approx(wanted, abs=1e-6)
        again = scorer.expected("a", row, i)
        assert (again.low, again.high, again.best) == pytest.approx(found, rel=1e-9)
        seen.add(i)
    assert len(seen) >= 2, "the records of this test should have several suspects"


def test_under_a_regime_the_suspect_has_its_expected_reading_too() -> None:
    scorer = Scorer(a_regime_model())
    times_ns, values = some_records(8, 12, gaps=0.05)
    scores, _ = scorer.score("a", times_ns, values, None)
    for r in range(12):
        i = int(scores.suspect[r])
        if i >= 0 and not scorer.instruments[i].is_state:
            again = scorer.expected("a", scores.rows[r], i)
            assert again.low == pytest.approx(scores.expected_low[r])
            assert again.high == pytest.approx(scores.expected_high[r])


def test_a_state_is_expected_as_words_with_probabilities(scorer: Scorer) -> None:
    scores = run(scorer, [0.0])
    expected = scorer.expected("a", scores.rows[0], 3)
    assert expected.words is not None
    assert list(expected.words) == ["running", "stopped"]
    # The rest belongs to words never seen.
    assert 0.5 < sum(expected.words.values()) < 1.0
    assert np.isnan(expected.low)


def test_a_reading_outside_its_span_counts_as_missing_and_is_named(scorer: Scorer) -> None:
    at = np.array([10 * S])
    outside, gap = USUAL.copy(), USUAL.copy()
    outside[0, 0], gap[0, 0] = 51.0, np.nan
    a, _ = scorer.score("a", at, outside, None)
    b, _ = scorer.score("a", at, gap, None)
    assert a.usable[0].tolist() == [False, True, True, True]
    assert a.missing[0] == 1
    np.testing.assert_array_equal(a.rows, b.rows)
    assert a.surprise[0] == b.surprise[0]


def test_a_reading_at_the_end_of_its_span_is_used(scorer: Scorer) -> None:
    edge = USUAL.copy()
    edge[0, 0] = 50.0
    scores, _ = scorer.score("a", np.array([10 * S]), edge, None)
    assert scores.missing[0] == 0


def test_too_few_readings_are_scored_and_not_judged(scorer: Scorer) -> None:
    values = np.array([[12.0, np.nan, np.nan, np.nan], [np.nan] * 4, [12.0, 14.0, np.nan, np.nan]])
    scores, _ = scorer.score("a", np.array([1, 2, 3]) * 10 * S, values, None)
    assert scores.judged.tolist() == [False, False, True]
    assert np.isnan(scores.excess).tolist() == [True, True, False]
    assert np.isfinite(scores.surprise).all()
    assert scores.surprise[1] == pytest.approx(0.0, abs=1e-9)
    assert scores.suspect[1] == -1
    assert scores.alert[:2].tolist() == [0, 0]


def with_levels(model: Model, **levels: float) -> Scorer:
    """Return a scorer of the model with other levels."""
    return Scorer(replace(model, levels=replace(model.levels, **levels)))  # type: ignore[arg-type]


def test_levels_raise_alerts_and_one_above_the_record_level_says_record() -> None:
    model = a_model()
    plain = run(Scorer(model), [0.0] * 3)
    excess, sustained = float(plain.excess[0]), float(plain.sustained[0])
    low, far = excess - 1.0, excess + 1.0
    none = run(with_levels(model, record=far, sustained=1e6), [0.0] * 3)
    assert [ALERT_WORDS[a] for a in none.alert] == ["", "", ""]
    record = run(with_levels(model, record=low, sustained=1e6), [0.0] * 3)
    assert record.alert[0] == RECORD_ALERT
    slow = run(with_levels(model, record=1e6, sustained=sustained - 0.1), [0.0] * 3)
    assert slow.alert[0] == SUSTAINED_ALERT
    both = run(with_levels(model, record=low, sustained=sustained - 0.1), [0.0] * 3)
    assert both.alert[0] == RECORD_ALERT


def test_one_glitch_of_any_size_raises_no_sustained_alert() -> None:
    model = a_model()
    levels = model.levels
    weight = 1 - np.exp(-levels.step_s / levels.tau_s)
    usual = model.members["a"].usual.sustained
    cap = usual + 0.95 * (levels.sustained - usual) / weight
    scorer = with_levels(model, cap=cap, record=5.0)
    glitch = np.array([[49.9, -900.0, 99.9, 1.0]])
    scores, _ = scorer.score("a", np.array([10 * S]), glitch, None)
    assert scores.excess[0] > 10 * levels.sustained
    assert scores.alert[0] == RECORD_ALERT
    assert scores.sustained[0] < levels.sustained


def test_a_source_never_seen_is_scored_by_the_fleets_member(scorer: Scorer) -> None:
    at = np.array([10 * S])
    fleet = Scorer(replace(scorer.model, members={}))
    unseen, _ = scorer.score("new", at, USUAL, None)
    own, _ = scorer.score("a", at, USUAL, None)
    wanted, _ = fleet.score("a", at, USUAL, None)
    assert unseen.surprise[0] == wanted.surprise[0] != own.surprise[0]


def test_a_standing_of_another_model_is_started_anew(scorer: Scorer) -> None:
    times_ns, values = some_records(3, 5, gaps=0.0)
    other = Standing("fedcba9876543210", int(times_ns[-1]) + 10 * S, 99.0)
    fresh, _ = scorer.score("a", times_ns, values, None)
    taken, standing = scorer.score("a", times_ns, values, other)
    np.testing.assert_array_equal(fresh.sustained, taken.sustained)
    assert standing.model == scorer.model.name


@pytest.mark.parametrize("n", [1, 3])
def test_a_batch_of_late_records_is_scored_and_leaves_the_standing(scorer: Scorer, n: int) -> None:
    times_ns, values = some_records(3, 6, gaps=0.0)
    _, standing = scorer.score("a", np.sort(times_ns), values, None)
    late = np.full(n, standing.time_ns - 5 * S)
    scores, after = scorer.score("a", late, values[:n], standing)
    assert scores.late.all()
    assert np.isfinite(scores.surprise).all()
    assert after.to_bytes() == standing.to_bytes()
    assert set(scores.sustained) == {standing.sustained}


def test_warming_needs_no_history_and_leaves_nothing_behind(scorer: Scorer) -> None:
    fresh = Scorer(a_model())
    fresh.warm()
    times_ns, values = some_records(4, 5)
    a, _ = fresh.score("a", times_ns, values, None)
    b, _ = scorer.score("a", times_ns, values, None)
    np.testing.assert_array_equal(a.excess, b.excess)
