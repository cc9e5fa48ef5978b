"""Proposal: whether a night counts, in a word and its reasons; a person signs, the program does not."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from daq.records import VERDICTS
from daq.report.facts import fact, said

COUNTS, IN_PART, DOUBTFUL, NOT = VERDICTS
GRAVE_P, ODD_P = 1e-3, 0.01
EXPECTED = 0.046  # of checks beyond two standard errors, by chance


def proposal(facts: Mapping[str, Any]) -> tuple[str, tuple[str, ...]]:
    """Return one of the four verdicts, and at most three reasons."""
    found = sorted(_marks(facts), key=lambda mark: -VERDICTS.index(mark[0]))
    if not found or found[0][0] == COUNTS:
        return COUNTS, tuple(reason for _, reason in found)[:3]
    word = found[0][0]
    return word, tuple(reason for verdict, reason in found if verdict != COUNTS)[:3]


def _marks(facts: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    """Yield what speaks for a verdict, with the reason in words."""
    if fact(facts, "kappa_se") is None:
        yield NOT, "There is no residual with an error bar: that needs two complete pairs of laps."
    if fact(facts, "damaged"):
        yield DOUBTFUL, "A part of the archive is lost."
    if fact(facts, "account.doubtful"):
        yield DOUBTFUL, "So many stands are left out that a person has to decide."
    yield from _checked(fact(facts, "account.checks") or ())
    together = fact(facts, "positions.combined_p")
    if together is not None and together < GRAVE_P:
        yield (
            DOUBTFUL,
            said(facts, "The structure by position is improbable: p = {positions.combined_p:.2g}."),
        )
    if fact(facts, "visits_missing"):
        yield IN_PART, said(facts, "{visits_missing} of {visits_planned} visits are missing.")
    elif fact(facts, "visits_planned"):
        yield COUNTS, said(facts, "All {visits_planned} planned visits were done.")


def _checked(checks: Any) -> Iterator[tuple[str, str]]:
    known = [check for check in checks if fact(check, "p") is not None and fact(check, "name") is not None]
    for check in known:
        if check["p"] < GRAVE_P:
            yield DOUBTFUL, said(check, "The check `{name}` is off: p = {p:.2g}.")
    if known and min(check["p"] for check in known) >= GRAVE_P:
        odd = sum(check["p"] < EXPECTED for check in known)
        yield (
            COUNTS,
            f"{odd} of {len(known)} checks are beyond two errors; {EXPECTED * len(known):.1f} expected.",
        )
