"""How long a phone that opens the page for the first time waits for a curve.

python -m tests.benchmarks.bench_first_curve
"""

from __future__ import annotations

import os
import tempfile
import time
from pathlib import Path
from statistics import median

from playwright.sync_api import Browser, sync_playwright

from tests.browser.conftest import FLAGS, Lab
from tests.dashboard import feeds

OPENINGS = 5
CURVE = "path.js-line"


def waited_s(browser: Browser, address: str) -> tuple[float, float]:
    """Return the time from the first request to an empty page, the yardstick, and to a curve [s]."""
    context = browser.new_context(viewport={"width": 390, "height": 844})  # an empty cache each time
    page, began_s = context.new_page(), time.monotonic()
    page.goto(address, wait_until="commit")
    page.wait_for_selector("#page", state="attached")
    framed_s = time.monotonic() - began_s
    page.wait_for_selector(CURVE, state="attached")
    curve_s = time.monotonic() - began_s
    context.close()
    return framed_s, curve_s


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as folder, sync_playwright() as playwright:
        lab = Lab(Path(folder))
        lab.put(feeds.feed(pairs=60, planned=60, positions=201))
        lab.serve()
        path = os.environ.get("TERCET_CHROMIUM", "/usr/bin/chromium")
        with playwright.chromium.launch(executable_path=path, args=FLAGS) as browser:
            times = [waited_s(browser, lab.address) for _ in range(OPENINGS)]
        lab.stop()
    framed_s, curve_s = (median(column) for column in zip(*times, strict=True))
    ratio = f"{curve_s / framed_s:.1f} x the empty page's {framed_s:.2f} s"
    print(f"first curve after {curve_s:.2f} s (at most 3), {ratio}")
    print(f"load of this machine: {os.getloadavg()[0]:.1f} on {os.cpu_count()} cores")
