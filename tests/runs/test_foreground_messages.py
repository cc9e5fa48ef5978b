"""A run in the foreground tells people as the service does: urgent mail at once, the rest when it is over."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time

from daq.storage.lab_book import select
from tests.mail import address_of, mail_server


def test_an_overload_is_mailed_at_once_and_the_rest_when_the_run_is_over(measurement, instruments, tmp_path):
    text = measurement.read_text()
    assert "[quality]" in text
    measurement.write_text(text.replace("[quality]", "[quality]\noverload_hz = 10.0", 1))
    lab = tmp_path / "lab"
    lab.mkdir()
    with mail_server() as server:
        (lab / "lab.toml").write_text(
            f'[messages]\nurgent = ["{address_of(server)}"]\nzone = "Europe/Berlin"\n'
        )
        words = [sys.executable, "-m", "daq", "run", str(measurement), "--into", str(lab), "--json"]
        with subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as run:
            until_s = time.monotonic() + 60
            while not server.handler.got and run.poll() is None:
                assert time.monotonic() < until_s, "no urgent mail came"
                time.sleep(0.05)
            going_on = run.poll() is None
            run.send_signal(signal.SIGINT)
            out, said = run.communicate(timeout=60)

    assert going_on, said
    urgent, over, rest = server.handler.got
    assert ": hold" in urgent and "and 10 are allowed" in urgent
    assert "hold is over" in over
    assert "a run in the foreground is over" in rest
    assert json.loads(out)["ended"] in rest
    assert select(lab, "messages", "sent_utc IS NULL") == []
