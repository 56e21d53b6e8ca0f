"""Open labelled tables as one-class tasks, beside two methods in the same run.

Breast cancer (Wisconsin diagnostic) and wine recognition as scikit-learn 1.9 carries them
(UCI Machine Learning Repository). One class is history, the rest of it and the others are
scored; the area under the ROC curve says how well the others stand out. Not this project's
kind of data: no time, few rows, many channels. It goes the public way all the same: files,
`survey`, `learn`, `score`, shipped defaults.
"""

from __future__ import annotations

import csv
from datetime import UTC, datetime, timedelta
from pathlib import Path

import click
import numpy as np
import pytest
from click.testing import CliRunner
from numpy.typing import NDArray
from sklearn.datasets import load_breast_cancer, load_wine
from sklearn.decomposition import PCA
from sklearn.ensemble import IsolationForest
from sklearn.metrics import roc_auc_score
from sklearn.preprocessing import StandardScaler

from training.learn import learn_command
from training.score import score_command
from training.survey import survey_command

Floats = NDArray[np.float64]


def write(path: Path, values: Floats, names: list[str]) -> None:
    """Write records a minute apart; the time is made up."""
    start = datetime(2026, 1, 1, tzinfo=UTC)
    with path.open("w", encoding="utf-8", newline="") as file:
        out = csv.writer(file)
        out.writerow(["time", *names])
        for k, row in enumerate(values.tolist()):
            out.writerow([(start + timedelta(minutes=k)).isoformat(), *row])


def ours(folder: Path, history: Floats, records: Floats, names: list[str]) -> Floats:
    """Return the surprise of records by the three commands."""
    write(folder / "history.csv", history, names)
    write(folder / "records.csv", records, names)
    channels, model, scores = (str(folder / n) for n in ("channels.toml", "model", "scores.csv"))
    for command, words in (
        (survey_command, ["history.csv", "--out", channels]),
        (learn_command, ["history.csv", "--channels", channels, "--out", model]),
        (score_command, ["records.csv", "--model", model, "--out", scores]),
    ):
        line = [str(folder / words[0]), *words[1:]]
        result = CliRunner().invoke(command, line, catch_exceptions=False)
        assert result.exit_code == 0, result.output
    with Path(scores).open(encoding="utf-8") as file:
        return np.array([float(row["surprise"]) for row in csv.DictReader(file)])


def pca(history: Floats, records: Floats) -> Floats:
    """Return T2 and residual of 85 % of the variance, each in units of its history, summed."""
    scale = StandardScaler().fit(history)
    model = PCA(0.85, svd_solver="full").fit(scale.transform(history))

    def two(values: Floats) -> tuple[Floats, Floats]:
        x = scale.transform(values)
        z = model.transform(x)
        rest = x - model.inverse_transform(z)
        return (z**2 / model.explained_variance_).sum(1), (rest**2).sum(1)

    own, new = two(history), two(records)
    return np.asarray(sum(b / np.quantile(a, 0.95) for a, b in zip(own, new, strict=True)))


def areas(folder: Path, values: Floats, labels: NDArray[np.int64], normal: int) -> list[float]:
    """Return the areas of ours, IsolationForest and PCA for one class as history."""
    rng = np.random.default_rng(7)
    rows = rng.permutation(np.flatnonzero(labels == normal))
    history, kept = rows[: int(0.7 * len(rows))], rows[int(0.7 * len(rows)) :]
    records = np.concatenate([kept, np.flatnonzero(labels != normal)])
    odd = labels[records] != normal
    names = [f"c{k}" for k in range(values.shape[1])]
    forest = IsolationForest(n_estimators=100, random_state=0).fit(values[history])
    found = (
        ours(folder, values[history], values[records], names),
        -forest.score_samples(values[records]),
        pca(values[history], values[records]),
    )
    return [float(roc_auc_score(odd, score)) for score in found]


# Inside a channel's range bins of equal frequency are all alike, however thin the readings lie
# in some of them, so a class that differs within the range of the other stands out less.
FLAT = pytest.mark.xfail(reason="bins of equal frequency are flat inside the range")
# Data, and the class taken as normal.
TASKS = [
    pytest.param("breast cancer", 1, marks=FLAT),
    ("wine", 0),
    pytest.param("wine", 1, marks=FLAT),
    ("wine", 2),
]


@pytest.mark.parametrize(("data", "normal"), TASKS)
def test_odd_classes_stand_out_no_less_than_by_the_worse_of_two_methods(
    tmp_path: Path, data: str, normal: int
) -> None:
    found = load_breast_cancer() if data == "breast cancer" else load_wine()
    mine, forest, components = areas(tmp_path, found.data, found.target, normal)
    click.echo(
        f"{data}, class {normal} as history: area {mine:.3f}, "
        f"IsolationForest {forest:.3f}, PCA {components:.3f}"
    )
    assert mine >= min(forest, components)
