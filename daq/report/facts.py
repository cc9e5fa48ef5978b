"""Facts: sentences whose every number stands in the record, or that are left out."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from string import Formatter
from typing import Any

from daq.report.numbers import MINUS


class MissingError(LookupError):
    """A number that a sentence wants and the record has not."""


def fact(facts: Any, path: str) -> Any:
    """Return what stands at a dotted path; None where nothing does, or nothing that can be told."""
    for key in path.split("."):
        if not isinstance(facts, Mapping) or key not in facts:
            return None
        facts = facts[key]
    untold = facts is None or (isinstance(facts, float) and not math.isfinite(facts))
    return None if untold or (isinstance(facts, (str, Sequence, Mapping)) and not facts) else facts


def said(facts: Mapping[str, Any], text: str) -> str:
    """Return a sentence with its fields, "{path:form}" or "{path*factor:form}", filled from facts.

    "" where one of them is missing.
    """
    try:
        return "".join(
            literal + ("" if field is None else _told(facts, field, form or ""))
            for literal, field, form, _ in Formatter().parse(text)
        )
    except MissingError:
        return ""


def _told(facts: Mapping[str, Any], field: str, form: str) -> str:
    """Return a fact in a form, with a typographic minus; raises MissingError where there is none."""
    path, _, factor = field.partition("*")
    found = fact(facts, path)
    if found is None or isinstance(found, Mapping):
        raise MissingError(path)
    try:
        value = float(found) * float(factor) if factor else found
        text = format(value, form)
    except (ValueError, TypeError) as error:
        raise MissingError(path) from error
    return text.replace("-", MINUS, 1) if isinstance(value, (int, float)) and value < 0 else text


def all_said(facts: Mapping[str, Any], texts: Iterable[str]) -> tuple[str, ...]:
    """Return the sentences that can be said."""
    return tuple(filter(None, (said(facts, text) for text in texts)))
