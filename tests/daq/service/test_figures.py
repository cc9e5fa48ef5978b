"""The report has the warnings that stood at the end of a run, from its log."""

from __future__ import annotations

from daq.service.figures import warnings_of
from daq.storage.log import RunLog


def test_what_was_cleared_is_gone_and_what_got_worse_has_its_latest_words(tmp_path):
    log = RunLog(tmp_path)
    log.append("warning", id="level-1", utc="22:00", text="The rate fell.", in_doubt=False)
    log.append("warning", id="hold-1", utc="23:00", text="No reply.", in_doubt=False)
    log.append("warning worse", id="level-1", utc="24:00", text="The rate fell a lot.", in_doubt=True)
    log.append("warning cleared", id="hold-1", utc="24:10", text="No longer: No reply.", in_doubt=False)

    (one,) = warnings_of(tmp_path)

    assert one == {"id": "level-1", "utc": "24:00", "text": "The rate fell a lot.", "in_doubt": True}
