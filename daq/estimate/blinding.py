"""Blinding: hidden offsets that anybody can check afterwards, and what each state of it lets be seen."""

from __future__ import annotations

import hashlib
import hmac
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

OPEN, BLINDED, FROZEN, REVEALED = "open", "blinded", "frozen", "revealed"
STATES = (OPEN, BLINDED, FROZEN, REVEALED)  # in this order, with no way back
GENESIS = "0" * 64


@dataclass(frozen=True, slots=True)
class Blinding:
    """What is hidden of a run: its state, the offset of every term of order three and above, whose it is.

    A state that hides has no offsets where the secret is not at hand: nothing of kappa can be shown then.
    """

    state: str = OPEN
    offsets: Mapping[str, float] = field(default_factory=dict, repr=False)
    scope: str = ""

    @property
    def hides(self) -> bool:
        """Whether kappa, and what gives it away, must not be seen; a state that is not known hides."""
        return self.state not in (OPEN, REVEALED)

    def offset(self, term: str) -> float:
        """Return the offset of a term.

        Raises
        ------
        ValueError
            When it is not at hand: nothing is shown then, rather than too much.
        """
        if term not in self.offsets:
            raise ValueError(f"this run is {self.state}, and the secret that hides its kappa is not at hand")
        return self.offsets[term]


def blind_offset(secret: bytes, scope: str, term: str, halfwidth: str) -> tuple[float, str]:
    """Return the offset of a term within +-halfwidth, and the commitment to it in hexadecimal digits.

    Parameters
    ----------
    secret
        32 or more random bytes, made once and kept from everybody's eyes.
    scope
        The campaign whose nights share the offset.
    term
        The interference term that it moves, like "ABC".
    halfwidth
        Decimal number as written in the description; the text itself is part of the message.

    Notes
    -----
    The digest d = HMAC-SHA256(secret, message) is published to reveal; then SHA-256 of the commitment's
    message and d must give the commitment. Protects people from their own eyes, not data from a person.

    References
    ----------
    .. [1] "Blind analysis in nuclear and particle physics", Annu. Rev. Nucl. Part. Sci. 55, 141 (2005), the
       hidden-offset method.
    """
    digest = blind_digest(secret, scope, term, halfwidth)
    return revealed_offset(digest, halfwidth), commitment(digest, scope, term, halfwidth)


def blind_digest(secret: bytes, scope: str, term: str, halfwidth: str) -> bytes:
    """Return the digest that holds an offset; it is published to reveal, never the secret."""
    if len(secret) < 32:
        raise ValueError(f"a blinding secret has 32 bytes or more, not {len(secret)}")
    if not float(halfwidth) > 0:
        raise ValueError(f"the half width of the blinding must be above zero, not {halfwidth!r}")
    return hmac.digest(secret, _message("kappa-blind/1", scope, term, halfwidth), "sha256")


def revealed_offset(digest: bytes, halfwidth: str) -> float:
    """Return the offset that a digest holds: uniform within +-halfwidth."""
    draw = int.from_bytes(digest[:8], "big") >> 11  # 53 bits: every one is exact in a float
    return float(halfwidth) * (2 * ((draw + 0.5) / 2**53) - 1)


def commitment(digest: bytes, scope: str, term: str, halfwidth: str) -> str:
    """Return what is written down before the first count, so that a digest published later can be checked."""
    return hashlib.sha256(_message("kappa-commit/1", scope, term, halfwidth) + digest).hexdigest()


def chained(before: str, event: Mapping[str, Any]) -> str:
    """Return the hash of an event of the blinding record, which holds the hash of the one before it."""
    canonical = json.dumps(dict(event), sort_keys=True, separators=(",", ":"), ensure_ascii=True)
    return hashlib.sha256(f"{before}\n{canonical}".encode("ascii")).hexdigest()


def _message(tag: str, scope: str, term: str, halfwidth: str) -> bytes:
    fields = (tag, scope, term, halfwidth)
    if any("\n" in field or not field.isascii() for field in fields):
        raise ValueError("scope, term and half width of a blinding are plain ASCII on one line")
    return "".join(f"{field}\n" for field in fields).encode("ascii")
