"""What the metrics cost, beside the same feed as JSON: `python -m tests.benchmarks.bench_metrics`."""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from dataclasses import replace

from daq.records import Reading
from daq.service.metrics import Tally, metrics_text
from tests.dashboard.feeds import feed

READING = Reading(0, 1, 3, 0.0, 2.0, 0, 2_000_000_000, 10**18, 2.0, (80_000.0,))
TIMES = 500


def cost_us(work: Callable[[], object]) -> float:
    """Return the CPU time of one call, the mean of many [us]."""
    begun = time.process_time()
    for _ in range(TIMES):
        work()
    return (time.process_time() - begun) / TIMES * 1e6


if __name__ == "__main__":
    content, tally = feed(), Tally()
    for mask in range(8):
        tally.add(replace(READING, opening=mask))
    text_us = cost_us(lambda: metrics_text(content, tally, 1))
    yardstick_us = cost_us(lambda: json.dumps(content))
    print(
        f"metrics {text_us:.0f} us CPU (target 1000), {text_us / yardstick_us:.2f} x json.dumps of the feed"
    )
