"""Messages to people: kept in the lab book until they are sent; urgent ones at once, the rest in a digest."""

from __future__ import annotations

import logging
from collections.abc import Callable, Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

from daq.errors import DescriptionError
from daq.service.calendar import latest
from daq.service.requests import utc_now
from daq.service.settings import Messages, with_secrets
from daq.storage.lab_book import insert, select, update

URGENT, NOTE, TEST, DIGEST, WELL = "urgent", "note", "test", "digest", "well"
AT_ONCE = (URGENT, TEST, WELL)
EVENING_LATE = timedelta(hours=1)  # a word for the evening is none later
SILENT_REPEAT_S = 3600.0
MORE_WAIT = "More has happened than may be sent tonight: look at the page, or at the digest in the morning."
Send = Callable[[Sequence[str], str, str], str]  # addresses, subject, body -> what went wrong, or nothing


def post(lab: Path, kind: str, subject: str, body: str) -> int:
    """Leave a message for people in the book of a lab and return its number.

    An urgent one that says what another said within the hour becomes a note: it is in the digest.
    """
    if kind == URGENT:
        since = (datetime.now(UTC) - timedelta(seconds=SILENT_REPEAT_S)).isoformat(timespec="seconds")
        where = "kind = ? AND subject = ? AND utc >= ?"
        kind = (
            NOTE if select(lab, "messages", where, (URGENT, subject, since.replace("+00:00", "Z"))) else kind
        )
    return insert(lab, "messages", utc=utc_now(), kind=kind, subject=subject, body=body)


def send_urgent(lab: Path, messages: Messages, now: datetime, send: Send) -> int:
    """Send what is urgent, oldest first, within the limits of hour and night; return how many went."""
    went = 0
    for row in select(lab, "messages", "sent_utc IS NULL AND kind IN (?, ?, ?)", AT_ONCE):
        body = f"{row['body']}\n\n({row['utc']})"
        if row["kind"] == URGENT:
            left = _left(lab, messages, now)
            if left <= 0:
                continue
            body += f"\n\n{MORE_WAIT}" if left == 1 and _waiting(lab) > 1 else ""
        if not _sent(lab, [row], send(_filled(messages.urgent), row["subject"], body), now):
            break
        went += 1
    return went


def send_digest(
    lab: Path, messages: Messages, now: datetime, since: datetime, summary: Callable[[], str], send: Send
) -> bool:
    """Send the morning's digest when it is due; return whether one went.

    Parameters
    ----------
    since
        When the service started: a morning before it has no digest.
    summary
        What ran, waits and is armed, in words.
    """
    due = latest(messages.digest_at, messages.zone, now)
    before = select(lab, "messages", "kind = ?", (DIGEST,))
    last = max([since, *(datetime.fromisoformat(row["sent_utc"]) for row in before)])
    if due <= last:
        return False
    local = due.astimezone(ZoneInfo(messages.zone))
    title = f"the day to {local:%Y-%m-%d %H:%M} {messages.zone}"
    return send_notes(lab, messages, now, title, summary(), send)


def send_notes(lab: Path, messages: Messages, now: datetime, title: str, summary: str, send: Send) -> bool:
    """Send everything that waits as one message below a summary; return whether it went."""
    rows = select(lab, "messages", "sent_utc IS NULL")
    told = (f"{row['utc']}  {row['subject']}\n{row['body']}\n" for row in rows)
    subject, body = f"tercet: {title}", "\n".join([summary, "", *told])
    if not _sent(lab, rows, send(_filled(messages.digest or messages.urgent), subject, body), now):
        return False
    insert(lab, "messages", utc=utc_now(), kind=DIGEST, subject=subject, body=body, sent_utc=_text(now))
    return True


def post_evening(
    lab: Path, messages: Messages, now: datetime, since: datetime, says: Callable[[], tuple[str, str] | None]
) -> bool:
    """Leave the word before a night, subject and text, when its time has come; return whether there is one.

    Parameters
    ----------
    since
        When the service started: an evening before it has no word.
    """
    if not messages.evening_at:
        return False
    due = latest(messages.evening_at, messages.zone, now)
    told = select(lab, "messages", "kind = ? AND utc >= ?", (WELL, _text(due)))
    word = None if told or due <= since or now - due > EVENING_LATE else says()
    if word is None:
        return False
    insert(lab, "messages", utc=_text(now), kind=WELL, subject=word[0], body=word[1])
    return True


def by_apprise(addresses: Sequence[str], subject: str, body: str) -> str:
    """Send one message to every address; return what went wrong, without secrets, or nothing."""
    import apprise

    logging.getLogger("apprise").setLevel(logging.CRITICAL)  # it would write down what we keep to ourselves
    failed = 0
    for address in addresses:
        one = apprise.Apprise()
        if not one.add(address):
            raise DescriptionError(("lab.toml, messages: an address is none that apprise knows.",))
        failed += not one.notify(title=subject, body=body, body_format=apprise.NotifyFormat.TEXT)
    return f"{failed} of {len(addresses)} addresses took no message" if failed else ""


def _filled(addresses: Sequence[str]) -> list[str]:
    return [with_secrets(address) for address in addresses]


def _sent(lab: Path, rows: Sequence[dict[str, Any]], failed: str, now: datetime) -> bool:
    for row in rows:
        if failed:
            update(lab, "messages", row["id"], error=f"{utc_now()} {failed}")
        else:
            update(lab, "messages", row["id"], sent_utc=_text(now), error=None)
    return not failed


def _left(lab: Path, messages: Messages, now: datetime) -> int:
    """Return how many urgent messages may still go now."""
    where = "kind = ? AND sent_utc >= ?"
    hour = select(lab, "messages", where, (URGENT, _text(now - timedelta(hours=1))))
    night = select(lab, "messages", where, (URGENT, _text(latest(messages.digest_at, messages.zone, now))))
    return min(messages.an_hour - len(hour), messages.a_night - len(night))


def _waiting(lab: Path) -> int:
    return len(select(lab, "messages", "sent_utc IS NULL AND kind = ?", (URGENT,)))


def _text(moment: datetime) -> str:
    return moment.astimezone(UTC).isoformat(timespec="seconds").replace("+00:00", "Z")
