"""One night's numbers for Prometheus, as a file for the node exporter's text-file collector.

A file and not a push: the job lives for a while each night, on a machine whose exporter is
scraped anyway; a push would need one more server that goes on telling yesterday's numbers,
and a network that the job's unit does not have. The file is replaced in one step.
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

PUBLISHED, REFUSED, FAILED = "published", "refused", "failed"
VERDICTS = (PUBLISHED, REFUSED, FAILED)


@dataclass(frozen=True, slots=True)
class Metric:
    """One number with its help; labelled values by label name and value, or a single one."""

    name: str
    text: str
    values: Mapping[str, float] | float
    label: str = ""


def night_metrics(
    verdict: str,
    at_s: float,
    seconds: float,
    published_s: float | None,
    figures: Mapping[str, tuple[str, float]],
    answers: Sequence[tuple[str, bool, float | None]] = (),
) -> str:
    """Return the text of the file.

    figures: name without prefix to help and value. answers: question, passed, number.
    """
    metrics = [
        Metric(
            "verdict", "Whether the last night ended so.",
            {one: float(one == verdict) for one in VERDICTS}, "verdict",
        ),
        Metric("last_run_timestamp_seconds", "When the last night ended.", at_s),
        Metric("duration_seconds", "How long the last night took.", seconds),
    ]  # fmt: skip
    if published_s is not None:
        text = "When the model in use was published."
        metrics.append(Metric("published_timestamp_seconds", text, published_s))
    metrics += [Metric(name, text, value) for name, (text, value) in figures.items()]
    if answers:
        passed = {name: float(ok) for name, ok, _ in answers}
        numbers = {name: number for name, _, number in answers if number is not None}
        metrics.append(Metric("passed", "Whether a question was passed.", passed, "question"))
        metrics.append(Metric("number", "The number of a question.", numbers, "question"))
    return "".join(_lines(metrics))


def _lines(metrics: Iterable[Metric]) -> Iterable[str]:
    for metric in metrics:
        name = f"oddbranch_nightly_{metric.name}"
        yield f"# HELP {name} {metric.text}\n# TYPE {name} gauge\n"
        if isinstance(metric.values, Mapping):
            for key, value in metric.values.items():
                escaped = key.replace("\\", r"\\").replace('"', r"\"").replace("\n", r"\n")
                yield f'{name}{{{metric.label}="{escaped}"}} {value:.10g}\n'
        else:
            yield f"{name} {metric.values:.10g}\n"


def write_metrics(path: Path, text: str) -> None:
    """Replace the file in one step, readable for the exporter whatever the umask.

    Its folder must be there: one that is made would be one that no exporter reads.
    """
    aside = path.with_name(f".{path.name}.{os.getpid()}")
    aside.write_text(text, encoding="utf-8")
    aside.chmod(0o644)
    aside.replace(path)
