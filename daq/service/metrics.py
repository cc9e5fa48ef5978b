"""Metrics: what a scraper reads of the service, as OpenMetrics text made from the page's own feed."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from functools import cache
from importlib.metadata import version
from pathlib import Path
from typing import Any

from prometheus_client import CollectorRegistry
from prometheus_client.core import (
    CounterMetricFamily,
    GaugeMetricFamily,
    InfoMetricFamily,
    Metric,
    StateSetMetricFamily,
)
from prometheus_client.openmetrics.exposition import generate_latest

from daq import openings
from daq.estimate.blinding import Blinding
from daq.estimate.rows import DETECTOR
from daq.estimate.shown import HIDDEN_ORDER
from daq.records import Reading
from daq.sequencer import State
from daq.storage.feed import replace_text
from daq.storage.space import free_bytes

FILE = "metrics.prom"
LEVELS = ("note", "wake")


@dataclass(slots=True)
class Tally:
    """Sums by opening since the service started: visits, detections, live seconds.

    `hides`: the present run is blinded, and detections of its openings of three and more slits are not added.
    """

    hides: bool = False
    by_opening: dict[int, list[float]] = field(default_factory=dict)
    last_utc_s: float | None = None

    def add(self, reading: Reading) -> None:
        """Take in a reading."""
        sums = self.by_opening.setdefault(reading.opening, [0.0, 0.0, 0.0])
        sums[0] += 1
        if not (self.hides and reading.opening.bit_count() >= HIDDEN_ORDER):
            sums[1] += reading.values[DETECTOR]
        sums[2] += reading.live_s
        self.last_utc_s = (reading.utc_ns + reading.gate_close_ns - reading.gate_open_ns) / 1e9


def write_metrics(lab: Path, feed: Mapping[str, Any] | None, tally: Tally) -> None:
    """Replace the metrics file of a lab, whole."""
    replace_text(lab / FILE, metrics_text(feed, tally, free_bytes(lab)))


def metrics_text(feed: Mapping[str, Any] | None, tally: Tally, free: int) -> str:
    """Return the metrics as OpenMetrics text; what is not known, or hidden while blinded, is left out.

    Parameters
    ----------
    feed
        What the page is told of the present run; None while there is none.
    free
        Room on the disk [bytes].
    """
    registry = CollectorRegistry()
    registry.register(_Families([*_of_counts(tally), *_of_run(feed), *_of_place(free)]))
    return str(generate_latest(registry).decode())  # type: ignore[no-untyped-call]


@dataclass(frozen=True, slots=True, eq=False)
class _Families:
    families: list[Metric]

    def collect(self) -> list[Metric]:
        """Return them all, as the library asks for them."""
        return self.families


def _of_place(free: int) -> Iterator[Metric]:
    yield InfoMetricFamily("tercet_build", "Version of the program.", value={"version": _version()})
    yield _gauge("tercet_store_free_bytes", "Free space where runs are written.", free, "bytes")


def _of_counts(tally: Tally) -> Iterator[Metric]:
    columns = (
        ("tercet_visits", "Visits committed since the service started.", ""),
        ("tercet_counts", "Detections in all visits since the service started.", ""),
        ("tercet_live_seconds", "Time spent counting since the service started.", "seconds"),
    )
    for column, (name, text, unit) in enumerate(columns):
        family = CounterMetricFamily(name, text, labels=["opening"], unit=unit)
        for mask, sums in sorted(tally.by_opening.items()):
            family.add_metric([openings.name(mask)], sums[column])
        yield family
    if tally.last_utc_s is not None:
        text = "Unix time of the end of the last visit."
        yield _gauge("tercet_last_visit_timestamp_seconds", text, tally.last_utc_s, "seconds")


def _of_run(feed: Mapping[str, Any] | None) -> Iterator[Metric]:
    if feed is None:
        return
    states = {state.value: state.value == feed["state"] for state in State}
    yield StateSetMetricFamily("tercet_run_state", "State of the present run.", value=states)
    kappa, hidden = feed["kappa"], Blinding(str(feed["blinding"])).hides
    yield _gauge("tercet_pairs", "Complete pairs of laps.", kappa["pairs"])
    yield _gauge("tercet_planned_pairs", "Planned pairs of laps.", kappa["planned_pairs"])
    for name, key, text in (
        ("tercet_kappa_ratio", "value", "Running residual over its normalisation."),
        ("tercet_kappa_standard_error_ratio", "se", "Standard error of kappa from the pairs."),
    ):
        if kappa[key] is not None and not (key == "value" and hidden):
            yield _gauge(name, text, kappa[key], "ratio")
    warnings = GaugeMetricFamily("tercet_warnings", "Warnings that stand.", labels=["level"])
    for level in LEVELS:
        warnings.add_metric([level], sum(one.get("level") == level for one in feed["warnings"]))
    yield warnings
    yield _gauge("tercet_in_doubt", "Whether a warning puts kappa in doubt.", bool(feed.get("in_doubt")))


@cache  # reading the metadata of a package costs more than all the rest
def _version() -> str:
    return version("tercet")


def _gauge(name: str, text: str, value: float, unit: str = "") -> Metric:
    return GaugeMetricFamily(name, text, value=float(value), unit=unit)
