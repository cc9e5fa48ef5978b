"""Document: what the morning report says, block by block, before it becomes a page of HTML or PDF."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from daq.report.facts import all_said, fact, said
from daq.report.methods import methods

FOOTER = "Hold and stop in this program are requests over data links, not safety functions."


@dataclass(frozen=True, slots=True)
class Block:
    """A heading with sentences, or with a table whose first row names the columns."""

    title: str
    lines: tuple[str, ...] = ()
    rows: tuple[tuple[str, ...], ...] = ()


@dataclass(frozen=True, slots=True)
class Document:
    """A morning report: head, the verdict that is proposed, the first page, the appendix, the signature."""

    title: str
    head: tuple[str, ...]
    verdict: str
    reasons: tuple[str, ...]
    residual: tuple[str, ...]
    page: tuple[Block, ...]
    appendix: tuple[Block, ...]
    signature: str


def document(facts: Mapping[str, Any]) -> Document:
    """Return the morning report of a run."""
    blocks = (_budget(facts), _checks(facts), _happened(facts), _tonight(facts))
    more = (_methods(facts), _bench(facts), _exclusions(facts), _devices(facts), _archive(facts))
    return Document(
        title=fact(facts, "title") or fact(facts, "name") or "A run",
        head=all_said(
            facts, ("{name}", "{kind_said}", "from {started_utc} to {ended_utc}", "mask {set_up.chip}")
        ),
        verdict=fact(facts, "proposal.verdict") or "",
        reasons=_texts(facts, "proposal.reasons"),
        residual=all_said(facts, _RESIDUAL),
        page=tuple(block for block in blocks if block.lines or len(block.rows) > 1),
        appendix=tuple(block for block in more if block.lines or len(block.rows) > 1),
        signature=said(facts, "Accepted: {accepted.verdict}, by {accepted.by}, {accepted.utc}.")
        or "Accepted: ____________  by: ____________  date: ____________  remark: ________________________",
    )


_RESIDUAL = (
    "{told}",
    "{statement_said}",
    "Jackknife over {pairs} pairs, {normalisation} normalisation; counting alone would give "
    "± {kappa_counting_se*1e4:.2f} × 1e-4.",
    "95 % interval, read once at the planned end: ({once.low*1e4:+.2f} to {once.high*1e4:+.2f}) × 1e-4",
    "95 % over the whole night: ({whole.low*1e4:+.2f} to {whole.high*1e4:+.2f}) × 1e-4",
    "{zero_said}",
)


def _budget(facts: Mapping[str, Any]) -> Block:
    lines = fact(facts, "account.budget.lines") or ()
    rows = [
        (said(line, "{name}"), said(line, "{value*1e4:.3f}") or "not known", said(line, "{source}"))
        for line in lines
        if said(line, "{name}")
    ]
    total = said(facts, "{account.budget.total_se*1e4:.3f}")
    goal = said(facts, "{goal_se*1e4:.3f}")
    rows += [("total", total, _TOTAL)] if total else []
    rows += [("goal", goal, "the description")] if goal else []
    return Block("Where the error comes from [1e-4]", rows=(("what", "size", "how it was obtained"), *rows))


_TOTAL = (
    "the jackknife, what it cannot see added in squares; by chance it may lie below counting: see the check "
    "of the scatter"
)


def _checks(facts: Mapping[str, Any]) -> Block:
    rows = [
        (
            said(check, "{name}"),
            said(check, "{value:+.3g}") + said(check, " ± {se:.2g}") + said(check, " {unit}"),
            said(check, "{expected:+.2g}"),
            said(check, "{p:.2g}"),
        )
        for check in fact(facts, "account.checks") or ()
        if said(check, "{name}{value}{p}")
    ]
    together = said(facts, "{positions.combined_p:.2g}")
    rows += [("structure by position, three tests together", "", "", together)] if together else []
    return Block("Checks", rows=(("what", "found", "expected", "p"), *rows))


def _happened(facts: Mapping[str, Any]) -> Block:
    rows = [(said(one, "{utc}"), said(one, "{text}")) for one in fact(facts, "happened") or ()]
    done = all_said(
        facts,
        (
            "{visits_done} of {visits_planned} visits done, {visits_repeated} repeated, {visits_missing} "
            "missing; {stands_left_out} stands left out.",
            "Live {live_fraction*100:.1f} % of {run_s*0.000277777777777778:.2f} h.",
        ),
    )
    kept = tuple(row for row in rows if all(row))
    done = (*done, *_armed(facts))
    return Block("What happened", done, (("when (UTC)", "what"), *kept) if kept else ())


def _armed(facts: Mapping[str, Any]) -> Iterator[str]:
    """Yield who armed the start, and which bench records it did without, and why."""
    yield from all_said(facts, ("Armed by {armed.by}, {armed.utc}.",))
    for task, reason in (fact(facts, "armed.without") or {}).items():
        if isinstance(reason, str) and reason:
            yield f"Armed without a valid record of {task}: {reason}."


def _tonight(facts: Mapping[str, Any]) -> Block:
    sentences = (
        "At this error bar {tonight.pairs_to_goal} pairs in all reach the goal; {pairs} are done.",
        "Best dwell by the pilot: {tonight.best_dwell_s:.1f} s ({tonight.dwell_s:.1f} s planned).",
        "Wear: about {tonight.moves} mask moves and {tonight.counts:.3g} counts.",
        "{tonight.due}",
    )
    return Block("For tonight", all_said(facts, sentences))


def _methods(facts: Mapping[str, Any]) -> Block:
    paragraph = methods(facts)
    return Block("Methods paragraph", (paragraph,) if paragraph else ())


def _bench(facts: Mapping[str, Any]) -> Block:
    records = fact(facts, "bench") or {}
    rows = [
        (
            said(one, "{record}") or task,
            said(one, "{verdict}"),
            said(one, "{at_utc}"),
            said(one, "{sentence}"),
        )
        for task, one in records.items()
        if isinstance(one, Mapping)
    ]
    laid_in = _texts(facts, "laid_in") or (("Plan and estimate took none of them.",) if rows else ())
    head = ("record", "verdict", "when", "what")
    return Block("Bench records that held at the start", laid_in, (head, *rows))


def _exclusions(facts: Mapping[str, Any]) -> Block:
    left_out = fact(facts, "account.left_out") or {}
    rows = [
        (str(rule).replace("_", " "), str(many)) for rule, many in left_out.items() if isinstance(many, int)
    ]
    return Block("Stands left out, by rule", _texts(facts, "noticed"), (("rule", "stands"), *rows))


def _devices(facts: Mapping[str, Any]) -> Block:
    rows = [
        (str(name), said(one, "{role}"), said(one, "{driver}"), _identity(one))
        for name, one in (fact(facts, "devices") or {}).items()
    ]
    return Block("Devices", rows=(("name", "role", "driver", "identity"), *rows))


def _texts(facts: Mapping[str, Any], path: str) -> tuple[str, ...]:
    """Return what of a list is text."""
    return tuple(one for one in fact(facts, path) or () if isinstance(one, str))


def _identity(device: Any) -> str:
    told = fact(device, "identity")
    replies = told.values() if isinstance(told, Mapping) else (told,)
    return "; ".join(sorted({one for one in replies if isinstance(one, str)}))


def _archive(facts: Mapping[str, Any]) -> Block:
    return Block(
        "Archive", all_said(facts, ("Folder {run}", "Digest {digest}", "Digest of gate times {gate_digest}"))
    )


def words(found: Document) -> Iterator[str]:
    """Yield every text of a report, as a reader meets them."""
    yield from (found.title, *found.head, found.verdict, *found.reasons, *found.residual)
    for block in (*found.page, *found.appendix):
        yield block.title
        yield from block.lines
        yield from (cell for row in block.rows for cell in row)
    yield found.signature
