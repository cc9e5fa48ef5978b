"""Blinding: a hidden offset that anybody can check afterwards, and what may be shown meanwhile."""

from __future__ import annotations

import hashlib
import hmac

from daq.estimate.whole import Estimate


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
    if len(secret) < 32:
        raise ValueError(f"a blinding secret has 32 bytes or more, not {len(secret)}")
    if not float(halfwidth) > 0:
        raise ValueError(f"the half width of the blinding must be above zero, not {halfwidth!r}")
    digest = hmac.digest(secret, _message("kappa-blind/1", scope, term, halfwidth), "sha256")
    draw = int.from_bytes(digest[:8], "big") >> 11  # 53 bits: every one is exact in a float
    offset = float(halfwidth) * (2 * ((draw + 0.5) / 2**53) - 1)
    commitment = hashlib.sha256(_message("kappa-commit/1", scope, term, halfwidth) + digest).hexdigest()
    return offset, commitment


def shown(estimate: Estimate, blinding: str) -> Estimate:
    """Return what of an estimate may leave the program.

    Raises
    ------
    ValueError
        For any state but "open": nothing is shown then, rather than too much.
    """
    if blinding != "open":
        raise ValueError(
            f"this version shows estimates of open runs only; this run's blinding is {blinding!r}"
        )
    return estimate


def _message(tag: str, scope: str, term: str, halfwidth: str) -> bytes:
    fields = (tag, scope, term, halfwidth)
    if any("\n" in field or not field.isascii() for field in fields):
        raise ValueError("scope, term and half width of a blinding are plain ASCII on one line")
    return "".join(f"{field}\n" for field in fields).encode("ascii")
