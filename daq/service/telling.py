"""Telling people of a run's warnings, and of a day in a lab: words only, nothing is sent here."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import datetime, timedelta
from pathlib import Path

from daq.estimate.blinding import Blinding
from daq.estimate.standing import Change
from daq.service.messages import NOTE, URGENT, post
from daq.storage.feed import read_feed
from daq.storage.lab import runs
from daq.storage.lab_book import select


def tell_people(lab: Path, run: str, change: Change, *, quietly: bool) -> None:
    """Leave a message about a warning: urgent where it wakes, an all-clear only where it woke somebody.

    Parameters
    ----------
    quietly
        Nobody is to be woken: the run is a rehearsal, or somebody has muted it.
    """
    says = change.warning.says
    subject = f"{run}: {says.kind.replace('-', ' ')}"
    if change.became == "cleared":
        if select(lab, "messages", "kind = ? AND subject = ? AND sent_utc IS NOT NULL", (URGENT, subject)):
            post(lab, NOTE if quietly else URGENT, f"{subject} is over", f"No longer: {says.what}")
        return
    body = "\n".join((says.what, says.did, says.do, says.cost, says.good))
    post(lab, URGENT if says.wakes and not quietly else NOTE, subject, body)


def summary_of(lab: Path, now: datetime) -> str:
    """Return what a lab did in the last day, as words for the digest."""
    since = (now - timedelta(days=1)).timestamp()
    lines = [line for folder in runs(lab) for line in _run_lines(folder, since)]
    skipped = [row for row in select(lab, "starts") if row["outcome"].startswith("skipped")]
    lines += [
        f"Booking {row['booking']}, due {row['due_utc']}: {row['outcome']}."
        for row in skipped
        if datetime.fromisoformat(row["utc"]).timestamp() >= since
    ]
    return "\n".join(lines) or "The service is well. No run was going on in the last day."


def _run_lines(folder: Path, since: float) -> Iterator[str]:
    feed = read_feed(folder)
    if feed is None or datetime.fromisoformat(feed["written_utc"]).timestamp() < since:
        return
    kappa, ended = feed["kappa"], feed["ended"]
    state = f"ended ({ended['reason']})" if ended else feed["state"]
    yield f"{feed['run']}: {state}, {kappa['pairs']} of {kappa['planned_pairs']} pairs."
    if kappa["se"] is not None and kappa["value"] is not None:  # what is hidden is not in the feed
        name = "kappa + offset" if Blinding(str(feed["blinding"])).hides else "kappa"
        yield f"  {name} = {kappa['value']:+.2e} ± {kappa['se']:.2e}"
    yield from (f"  ! {one['what']} {one['good']}" for one in feed["warnings"])
