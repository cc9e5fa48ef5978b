"""Metrics are strict OpenMetrics, say nothing that is not known, and cost the same after a million visits."""

from __future__ import annotations

from prometheus_client.openmetrics.parser import text_string_to_metric_families

from daq.records import Reading
from daq.service.metrics import Tally, metrics_text, write_metrics
from tests.dashboard.feeds import WARNING, feed

READING = Reading(0, 1, 3, 0.0, 2.0, 0, 2_000_000_000, 10**18, 2.0, (80_000.0,))


def samples(text: str) -> dict[str, float]:
    return {
        f"{one.name}{sorted(one.labels.values())}": one.value
        for family in text_string_to_metric_families(text)
        for one in family.samples
    }


def tallied(times: int = 1) -> Tally:
    tally = Tally()
    for _ in range(times):
        tally.add(READING)
    return tally


def test_the_text_passes_the_strict_parser_and_holds_the_run():
    found = samples(metrics_text(feed(warnings=[WARNING | {"level": "wake"}]), tallied(), 10**9))

    assert found["tercet_visits_total['AB']"] == 1
    assert found["tercet_counts_total['AB']"] == 80_000
    assert found["tercet_live_seconds_total['AB']"] == 2
    assert found["tercet_run_state['counting']"] == 1
    assert found["tercet_run_state['holding']"] == 0
    assert found["tercet_warnings['wake']"] == 1
    assert found["tercet_pairs[]"] == 12
    assert found["tercet_store_free_bytes[]"] == 10**9
    assert found["tercet_last_visit_timestamp_seconds[]"] == 10**9 + 2


def test_what_is_not_known_is_left_out():
    found = samples(metrics_text(feed(pairs=0), Tally(), 10**9))

    assert not any(name.startswith(("tercet_kappa", "tercet_last_visit")) for name in found)


def test_what_is_hidden_from_the_page_is_hidden_here():
    blinded = feed()
    blinded["kappa"] = blinded["kappa"] | {"value": None}

    found = samples(metrics_text(blinded, tallied(), 10**9))

    assert "tercet_kappa_ratio[]" not in found
    assert "tercet_kappa_standard_error_ratio[]" in found


def test_without_a_run_the_service_still_says_that_it_is_there(tmp_path):
    write_metrics(tmp_path, None, Tally())

    text = (tmp_path / "metrics.prom").read_text()
    assert text.endswith("# EOF\n")
    assert "tercet_run_state" not in text


def test_the_text_costs_as_much_after_a_million_visits_as_after_one():
    one, million = tallied(), tallied()
    million.by_opening = {mask: [1e6, 8e10, 2e6] for mask in range(8)}
    one.by_opening = {mask: [1.0, 8e4, 2.0] for mask in range(8)}
    content = feed()

    assert len(metrics_text(content, million, 1)) < 1.2 * len(metrics_text(content, one, 1))


def test_a_tally_keeps_a_few_numbers_however_long_the_run_is():
    tally = tallied(1000)

    assert tally.by_opening == {3: [1000.0, 8e7, 2000.0]}
