"""Sessions: who is logged in to the page of a lab; the lab book keeps digests of tokens, never a token."""

from __future__ import annotations

import hashlib
import secrets
from datetime import UTC, datetime, timedelta
from pathlib import Path

from daq.storage.lab_book import lab_book
from daq.storage.people import Person

LASTS = timedelta(days=7)


def open_session(lab: Path, name: str) -> str:
    """Begin a session of somebody and return its token."""
    token, now = secrets.token_urlsafe(32), datetime.now(UTC)
    with lab_book(lab) as book:
        book.execute("DELETE FROM sessions WHERE expires_utc < ?", (_text(now),))
        book.execute(
            "INSERT INTO sessions (token_sha256, name, since_utc, expires_utc) VALUES (?, ?, ?, ?)",
            (_digest(token), name, _text(now), _text(now + LASTS)),
        )
    return token


def person_of(lab: Path, token: str) -> Person | None:
    """Return whose session a token is; None when it has ended, or never was."""
    with lab_book(lab) as book:
        row = book.execute(
            "SELECT people.name, people.role FROM sessions JOIN people ON people.name = sessions.name "
            "WHERE sessions.token_sha256 = ? AND sessions.expires_utc >= ?",
            (_digest(token), _text(datetime.now(UTC))),
        ).fetchone()
    return Person(row["name"], row["role"]) if row else None


def end_session(lab: Path, token: str) -> None:
    """End one session."""
    with lab_book(lab) as book:
        book.execute("DELETE FROM sessions WHERE token_sha256 = ?", (_digest(token),))


def end_sessions(lab: Path, name: str | None = None) -> int:
    """End every session of somebody, or of everybody, and return how many there were."""
    with lab_book(lab) as book:
        if name is None:
            return book.execute("DELETE FROM sessions").rowcount
        return book.execute("DELETE FROM sessions WHERE name = ?", (name,)).rowcount


def _digest(token: str) -> str:
    return hashlib.sha256(token.encode()).hexdigest()


def _text(moment: datetime) -> str:
    return moment.isoformat(timespec="seconds")
