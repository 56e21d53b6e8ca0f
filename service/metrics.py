"""Numbers for Prometheus, one registry per app.

The hot path adds to plain integers and arrays, a group at a time; a collector reads
them when scraped. Names: prefix, noun, base unit; labels only where their number is
bounded. The model's name is in one info metric only.
"""

from __future__ import annotations

import threading
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence

import numpy as np
from numpy.typing import NDArray
from prometheus_client.core import (
    CounterMetricFamily,
    GaugeMetricFamily,
    HistogramMetricFamily,
    InfoMetricFamily,
    Metric,
)
from prometheus_client.registry import CollectorRegistry

from scoring.alerts import KINDS
from service.alerting import ASKED_KINDS, Quiet
from service.engine import ALERT_WORDS, Engine
from service.pipeline import Job
from service.sheet import CONFLICT, KNOWN, NO_ROOM, STORED, Sheet
from service.store.tables import FLAG_AHEAD, FLAG_LATE, FLAG_NOT_JUDGED

# Edges around what a request should take: a single one some ms, a batch some ten.
_SECONDS = (0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0)
_RECORDS = (1.0, 2.0, 5.0, 10.0, 25.0, 50.0, 100.0, 250.0, 500.0, 1000.0, 2500.0, 10000.0)
# Excess rests near zero; levels usually lie between 5 and 50 nats. What is less than usual
# counts as zero, because a histogram with negative values has no sum that only rises.
_NATS = (0.0, 1.0, 2.0, 5.0, 10.0, 15.0, 20.0, 30.0, 50.0, 100.0, 200.0)
# What can become of a record, and of a model that is found; shown from the start at zero, so
# that a rule sees the first one too.
_OUTCOMES = ("stored", "late", "ahead", "known", "conflict", "no_room", "refused")
_RELOADS = ("taken", "refused")
# Unknown paths would each be a label value of their own.
OTHER_ROUTE = "other"


class Histogram:
    """Counts between fixed edges; `add` takes one value, `add_many` an array."""

    def __init__(self, edges: Sequence[float]) -> None:
        self.edges = np.array(edges)
        self._edge_list = list(edges)
        self.counts = [0] * (len(edges) + 1)
        self.sum = 0.0

    def add(self, value: float) -> None:
        """Count one value."""
        place = 0
        for edge in self._edge_list:
            if value <= edge:
                break
            place += 1
        self.counts[place] += 1
        self.sum += value

    def add_many(self, values: NDArray[np.float64]) -> None:
        """Count finite values."""
        places = np.searchsorted(self.edges, values, side="left")
        counted = np.bincount(places, minlength=len(self.counts)).tolist()
        self.counts = [old + new for old, new in zip(self.counts, counted, strict=True)]
        self.sum += float(values.sum())

    def buckets(self) -> list[tuple[str, float]]:
        """Return cumulative counts by upper edge, as the text format wants them."""
        total, found = 0, []
        for edge, count in zip([*self._edge_list, float("inf")], self.counts, strict=True):
            total += count
            found.append(("+Inf" if edge == float("inf") else repr(edge), float(total)))
        return found


class SourceTally:
    """What is kept of one source for the scrape."""

    __slots__ = ("last_ns", "n_over_level", "sustained")

    def __init__(self) -> None:
        self.last_ns, self.n_over_level, self.sustained = 0, 0, float("nan")


class Metrics:
    """All numbers of one app.

    per_source: whether a source is a label. n_sources_max: above this many sources
    the per-source numbers are summed under the label "all".
    """

    def __init__(self, *, per_source: bool = True, n_sources_max: int = 1000) -> None:
        self.per_source, self.n_sources_max = per_source, n_sources_max
        self.registry = CollectorRegistry()
        self.registry.register(_Collector(self))
        self._lock = threading.Lock()
        self.outcomes: Counter[str] = Counter(dict.fromkeys(_OUTCOMES, 0))
        self.n_not_judged = 0
        self.requests: Counter[tuple[str, str, str]] = Counter()
        self.request_seconds: dict[str, Histogram] = {}
        self.scoring_seconds = Histogram(_SECONDS)
        self.commit_seconds = Histogram(_SECONDS)
        self.batch_records = Histogram(_RECORDS)
        self.group_records = Histogram(_RECORDS)
        self.excess = Histogram(_NATS)
        self.over_level: Counter[str] = Counter(
            dict.fromkeys((word for word in ALERT_WORDS if word), 0)
        )
        self.suspects: Counter[str] = Counter()
        self.n_readings, self.missing = 0, Counter[str]()
        self.sources: dict[str, SourceTally] = {}
        self.store_failures = 0
        self.reloads: Counter[str] = Counter(dict.fromkeys(_RELOADS, 0))
        # Read when scraped; filled in by the app.
        self.gauges: Callable[[], Mapping[str, float]] = dict
        self.engine: Callable[[], Engine | None] = lambda: None
        self.alerts: Callable[[], Mapping[tuple[str, str], int]] = dict
        self.quiet: Callable[[], Quiet] = Quiet

    def request_done(self, route: str, method: str, status: int, seconds: float) -> None:
        """Count one answered request; called on the loop."""
        self.requests[route, method, str(status)] += 1
        histogram = self.request_seconds.get(route)
        if histogram is None:
            histogram = self.request_seconds[route] = Histogram(_SECONDS)
        histogram.add(seconds)

    def refused(self, n_records: int) -> None:
        """Count items that could not be read; called on the loop."""
        with self._lock:
            self.outcomes["refused"] += n_records

    def group_done(
        self, jobs: Sequence[Job], sheets: Sequence[Sheet], scoring_s: float, commit_s: float
    ) -> None:
        """Count one stored group; called by the writer."""
        with self._lock:
            self.scoring_seconds.add(scoring_s)
            self.commit_seconds.add(commit_s)
            for job in jobs:
                self.batch_records.add(float(job.batch.n_items))
            for sheet in sheets:
                self.group_records.add(float(len(sheet.sources)))
                self._count(sheet)

    def _count(self, sheet: Sheet) -> None:
        stored = sheet.status == STORED
        n_stored = int(np.count_nonzero(stored))
        if n_stored < len(stored):
            for status, word in ((KNOWN, "known"), (CONFLICT, "conflict"), (NO_ROOM, "no_room")):
                self.outcomes[word] += int(np.count_nonzero(sheet.status == status))
        if not n_stored:
            return
        late = ahead = 0
        if sheet.flags.any():
            late = int(np.count_nonzero(stored & (sheet.flags & FLAG_LATE > 0)))
            ahead = int(np.count_nonzero(stored & (sheet.flags & FLAG_AHEAD > 0)))
            unjudged = stored & (sheet.flags & FLAG_NOT_JUDGED > 0)
            self.n_not_judged += int(np.count_nonzero(unjudged))
        self.outcomes["late"] += late
        self.outcomes["ahead"] += ahead
        self.outcomes["stored"] += n_stored - late - ahead
        excess = sheet.scored.excess[stored]
        self.excess.add_many(np.maximum(excess[~np.isnan(excess)], 0.0))
        names = sheet.engine.layout.names
        self._count_missing(
            sheet.absent if n_stored == len(stored) else sheet.absent[stored], names
        )
        self._count_alerts(sheet, names, stored)
        self._count_sources(sheet, stored)

    def _count_missing(self, absent: NDArray[np.bool_], names: Sequence[str]) -> None:
        self.n_readings += absent.size
        if absent.any():
            by_column = np.count_nonzero(absent, axis=0).tolist()
            for name, n_absent in zip(names, by_column, strict=True):
                if n_absent:
                    self.missing[name] += n_absent

    def _count_alerts(self, sheet: Sheet, names: Sequence[str], stored: NDArray[np.bool_]) -> None:
        scored = sheet.scored
        for row in np.flatnonzero((scored.alert > 0) & stored).tolist():
            self.over_level[str(ALERT_WORDS[int(scored.alert[row])])] += 1
            self.source(sheet.sources[row]).n_over_level += 1
            column = int(scored.suspect[row])
            if column >= 0:
                self.suspects[names[column]] += 1

    def _count_sources(self, sheet: Sheet, stored: NDArray[np.bool_]) -> None:
        moved: Iterable[int] = range(len(sheet.sources))
        if sheet.flags.any() or not stored.all():
            still = sheet.flags & (FLAG_LATE | FLAG_AHEAD) > 0
            moved = np.flatnonzero(stored & ~still).tolist()
        # The last row of each source is what the scrape shows.
        last = {sheet.sources[row]: row for row in moved}
        for name, row in last.items():
            tally = self.source(name)
            tally.last_ns = max(tally.last_ns, int(sheet.times_ns[row]))
            tally.sustained = float(sheet.scored.sustained[row])

    def source(self, name: str) -> SourceTally:
        """Return the tally of one source."""
        tally = self.sources.get(name)
        if tally is None:
            tally = self.sources[name] = SourceTally()
        return tally


class _Collector:
    """Turns the tallies into metric families when scraped."""

    def __init__(self, metrics: Metrics) -> None:
        self.metrics = metrics

    def describe(self) -> list[Metric]:
        """Return nothing, so that registering does not collect."""
        return []

    def collect(self) -> Iterator[Metric]:
        """Yield every family."""
        m = self.metrics
        quiet = m.quiet()
        yield from self._records(m)
        yield from self._alerts(m, quiet)
        yield from self._times(m)
        yield from self._sources(m, quiet)
        yield from self._model(m)
        for name, value in m.gauges().items():
            yield GaugeMetricFamily(f"oddbranch_{name}", _GAUGE_HELP[name], value=value)

    @staticmethod
    def _records(m: Metrics) -> Iterator[Metric]:
        yield _counter("records", "Records by what became of them.", "outcome", m.outcomes)
        yield _counter(
            "records_over_level", "Records over a level, by the level's kind.", "kind", m.over_level
        )
        yield CounterMetricFamily(
            "oddbranch_records_not_judged", "Records with too few readings.", value=m.n_not_judged
        )
        engine = m.engine()
        none = dict.fromkeys(engine.layout.names if engine is not None else (), 0)
        suspects, missing = none | m.suspects, none | m.missing
        yield _counter("suspects", "Records over a level by their suspect.", "channel", suspects)
        yield _counter("missing_readings", "Readings that were absent.", "channel", missing)
        yield CounterMetricFamily(
            "oddbranch_readings", "Readings that could have come.", value=m.n_readings
        )
        yield _histogram(
            "excess_nats", "Excess of judged records, zero where less than usual.", m.excess
        )
        yield _histogram(
            "batch_records", "Items in a body or a piece of a stream.", m.batch_records
        )
        yield _histogram("group_records", "Records stored by one commit.", m.group_records)

    @staticmethod
    def _alerts(m: Metrics, quiet: Quiet) -> Iterator[Metric]:
        alerts = GaugeMetricFamily(
            "oddbranch_alerts", "Alerts by state and kind.", labels=["state", "kind"]
        )
        for (state, kind), n_alerts in sorted(m.alerts().items()):
            alerts.add_metric([state, kind], n_alerts)
        yield alerts
        hushed = GaugeMetricFamily(
            "oddbranch_alerts_quiet",
            "Raised alerts that call nobody, shelved or damped, by kind.",
            labels=["kind"],
        )
        for kind in KINDS:
            hushed.add_metric([kind], quiet.alerts[kind])
        yield hushed

    @staticmethod
    def _times(m: Metrics) -> Iterator[Metric]:
        requests = CounterMetricFamily(
            "oddbranch_requests", "Answered requests.", labels=["route", "method", "status"]
        )
        for labels, n_requests in sorted(m.requests.items()):
            requests.add_metric(list(labels), n_requests)
        yield requests
        seconds = HistogramMetricFamily(
            "oddbranch_request_seconds", "Time from a request to its answer.", labels=["route"]
        )
        for route, histogram in sorted(m.request_seconds.items()):
            seconds.add_metric([route], histogram.buckets(), histogram.sum)
        yield seconds
        yield _histogram("scoring_seconds", "Time to score and insert a group.", m.scoring_seconds)
        yield _histogram("commit_seconds", "Time to make a group durable.", m.commit_seconds)
        yield CounterMetricFamily(
            "oddbranch_store_failures", "Groups that could not be stored.", value=m.store_failures
        )
        yield _counter("model_reloads", "Models picked up or refused.", "outcome", m.reloads)

    @staticmethod
    def _sources(m: Metrics, quiet: Quiet) -> Iterator[Metric]:
        over = CounterMetricFamily(
            "oddbranch_source_records_over_level", "Records over a level.", labels=["source"]
        )
        last = GaugeMetricFamily(
            "oddbranch_source_last_record_timestamp_seconds",
            "Time of the newest record in the standing.",
            labels=["source"],
        )
        sustained = GaugeMetricFamily(
            "oddbranch_source_sustained_nats", "Sustained excess.", labels=["source"]
        )
        hushed = GaugeMetricFamily(
            "oddbranch_source_quiet",
            "1 while the source is out of service or its alerts of the kind are shelved.",
            labels=["source", "kind"],
        )
        tallies = dict(m.sources)
        if m.per_source and len(tallies) <= m.n_sources_max:
            for name, tally in tallies.items():
                over.add_metric([name], tally.n_over_level)
                for kind in ASKED_KINDS:
                    hushed.add_metric([name, kind], float((name, kind) in quiet.sources))
                if tally.last_ns:
                    last.add_metric([name], tally.last_ns / 1e9)
                    sustained.add_metric([name], tally.sustained)
        elif tallies:
            over.add_metric(["all"], sum(tally.n_over_level for tally in tallies.values()))
            last.add_metric(["all"], max(tally.last_ns for tally in tallies.values()) / 1e9)
        yield over
        yield last
        yield sustained
        yield hushed
        yield GaugeMetricFamily("oddbranch_sources", "Sources known.", value=len(tallies))

    @staticmethod
    def _model(m: Metrics) -> Iterator[Metric]:
        engine = m.engine()
        level = GaugeMetricFamily(
            "oddbranch_level_nats", "Value from which an alert is raised.", labels=["kind"]
        )
        info = InfoMetricFamily("oddbranch_model", "The model in use.")
        if engine is not None:
            for kind, value in engine.levels.items():
                level.add_metric([kind], value)
            info.add_metric([], {"model": engine.name})
        yield level
        yield info
        if engine is None:
            return
        for key, figure in engine.figures.items():
            yield GaugeMetricFamily(f"oddbranch_{key}", FIGURE_HELP[key], value=figure)


_GAUGE_HELP = {
    "store_size_bytes": "Size of the store on disk.",
    "store_free_bytes": "Free space on the store's disk.",
    "queue_records": "Records that wait for their commit.",
    "body_memory_bytes": "Bodies held in memory.",
    "alarm_budget_alerts_last_day": "Alerts raised in the last day that the budget counts.",
    "start_timestamp_seconds": "When the service started.",
    "model_published_timestamp_seconds": "When the model in use was published.",
    "model_refused": "1 while the model that was published last cannot be used.",
}
# What a model may say of itself, by the name of its metric.
FIGURE_HELP = {
    "model_history_end_timestamp_seconds": "Time of the last record that the model learned from.",
    "model_history_records": "Records that the model learned from.",
    "model_members": "Sources that the model knows themselves.",
    "model_held_out_surprise_nats": "Mean surprise of a record held out from learning.",
    "alarm_budget_alerts_per_day": "Alerts a day that the crew can follow up.",
}


def _counter(name: str, help_text: str, label: str, counts: Mapping[str, int]) -> Metric:
    family = CounterMetricFamily(f"oddbranch_{name}", help_text, labels=[label])
    for value, count in sorted(dict(counts).items()):
        family.add_metric([value], count)
    return family


def _histogram(name: str, help_text: str, histogram: Histogram) -> Metric:
    return HistogramMetricFamily(
        f"oddbranch_{name}", help_text, buckets=histogram.buckets(), sum_value=histogram.sum
    )
