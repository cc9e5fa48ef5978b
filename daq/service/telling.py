"""Telling people of a run's warnings: words only, nothing is sent here."""

from __future__ import annotations

from pathlib import Path

from daq.estimate.standing import Change
from daq.service.messages import NOTE, URGENT, post
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
