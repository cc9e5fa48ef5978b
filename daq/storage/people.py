"""People of a lab: who may look and who may ask, by name and password."""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import UTC, datetime
from functools import cache
from pathlib import Path

from argon2 import PasswordHasher
from argon2.exceptions import VerificationError

from daq.errors import DescriptionError
from daq.records import ROLES
from daq.storage.lab_book import lab_book, select

SHORTEST, LONGEST = 12, 200  # characters of a password; common practice, no source
_NAME = re.compile(r"\w[\w .'@-]{0,62}\w")
# Argon2id with 19 MiB, two passes and one lane: a check takes a tenth of a second and little memory.
_HASHER = PasswordHasher(time_cost=2, memory_cost=19 * 1024, parallelism=1)


@dataclass(frozen=True, slots=True)
class Person:
    """Somebody whom the page knows: a watcher reads, an operator also asks."""

    name: str
    role: str

    def may(self, role: str) -> bool:
        """Return whether this person may do what a role may do."""
        return ROLES.index(self.role) >= ROLES.index(role)


NOBODY = Person("", "watcher")  # whoever sits at this computer and has not logged in


def people(lab: Path) -> list[Person]:
    """Return everybody whom a lab knows, in the order in which they came."""
    return [Person(row["name"], row["role"]) for row in select(lab, "people")]


def add_person(lab: Path, name: str, role: str, password: str) -> Person:
    """Let somebody in and return them.

    Raises
    ------
    DescriptionError
        When the name is taken or odd, the role unknown, or the password too short.
    """
    problems = [*_wrong_name(lab, name), *_wrong_role(role), *_wrong_password(password)]
    if problems:
        raise DescriptionError(tuple(problems))
    since = datetime.now(UTC).isoformat(timespec="seconds")
    with lab_book(lab) as book:
        book.execute(
            "INSERT INTO people (name, role, hash, since_utc) VALUES (?, ?, ?, ?)",
            (name, role, _HASHER.hash(password), since),
        )
    return Person(name, role)


def set_password(lab: Path, name: str, password: str) -> None:
    """Give somebody another password, and end their sessions."""
    _known(lab, name)
    problems = _wrong_password(password)
    if problems:
        raise DescriptionError(tuple(problems))
    with lab_book(lab) as book:
        book.execute("UPDATE people SET hash = ? WHERE name = ?", (_HASHER.hash(password), name))
        book.execute("DELETE FROM sessions WHERE name = ?", (name,))


def remove_person(lab: Path, name: str) -> None:
    """Let somebody in no longer, and end their sessions."""
    _known(lab, name)
    with lab_book(lab) as book:
        book.execute("DELETE FROM people WHERE name = ?", (name,))
        book.execute("DELETE FROM sessions WHERE name = ?", (name,))


def person_with(lab: Path, name: str, password: str) -> Person | None:
    """Return whoever has this name and password; an unknown name takes as long as a wrong password."""
    found = select(lab, "people", "name = ?", (name,))
    hashed = found[0]["hash"] if found else _nobody()
    try:
        _HASHER.verify(hashed, password[:LONGEST])
    except VerificationError:
        return None
    return Person(found[0]["name"], found[0]["role"]) if found else None


@cache
def _nobody() -> str:
    return _HASHER.hash("nobody has this password")


def _known(lab: Path, name: str) -> None:
    names = [person.name for person in people(lab)]
    if name not in names:
        known = ", ".join(names) or "nobody"
        raise DescriptionError((f"lab {lab} knows no {name!r}. It knows: {known}.",))


def _wrong_name(lab: Path, name: str) -> list[str]:
    if not _NAME.fullmatch(name):
        return [f"{name!r} is no name: 2 to 64 letters, digits, spaces, or . ' @ - within."]
    taken = name in {person.name for person in people(lab)}
    return (
        [f"{name!r} is known already. Use `tercet people LAB password` for a new password."] if taken else []
    )


def _wrong_role(role: str) -> list[str]:
    return [] if role in ROLES else [f"there is no role {role!r}. Known: {', '.join(ROLES)}."]


def _wrong_password(password: str) -> list[str]:
    if SHORTEST <= len(password) <= LONGEST:
        return []
    return [f"a password has {SHORTEST} to {LONGEST} characters; a few words in a row are easy to keep."]
