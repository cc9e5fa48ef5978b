"""The morning report of a run, written beside it: HTML, PDF, and every number of both as JSON."""

from __future__ import annotations

import json
from collections.abc import Mapping
from itertools import pairwise
from math import ceil, isfinite
from pathlib import Path
from typing import Any

from matplotlib.figure import Figure

from daq.errors import StorageError
from daq.estimate.blinding import Blinding
from daq.report.closing import closing_lines
from daq.report.document import document
from daq.report.facts import fact
from daq.report.happened import happened, marks_h
from daq.report.html import html_text, svg_of
from daq.report.night_plot import draw_night
from daq.report.pdf import write_pdf
from daq.report.proposal import proposal
from daq.service.bench_records import due_at
from daq.service.figures import figures_of
from daq.storage.begin import plain
from daq.storage.log import read_log
from daq.storage.reader import read_meta

HTML, PDF, JSON = "report.html", "report.pdf", "report.json"
SIZE = (7.4, 4.2)


def write_report(folder: Path, figures: Mapping[str, Any] | None = None) -> dict[str, str]:
    """Write the morning report of a run beside it and return the files by kind.

    Raises
    ------
    StorageError
        When the archive cannot be read, or the report cannot be written.
    """
    facts = _finite(facts_of(folder, figures or figures_of(folder)))
    found = document(facts)
    picture = Figure(figsize=SIZE)
    draw_night(picture, facts)
    try:
        (folder / HTML).write_text(html_text(found, svg_of(picture)))
        (folder / JSON).write_text(json.dumps(plain(facts), indent=1))
        write_pdf(folder / PDF, found, facts)
    except OSError as error:
        raise StorageError(
            "the report cannot be written", where=str(folder), remedy="Look at the disk"
        ) from error
    return {kind: str(folder / name) for kind, name in (("html", HTML), ("pdf", PDF), ("facts", JSON))}


def facts_of(folder: Path, figures: Mapping[str, Any]) -> dict[str, Any]:
    """Return everything that a report may say, by name; blinded as the figures are."""
    meta, log = read_meta(folder), read_log(folder)
    live = _live(folder)
    hidden = Blinding(str(figures["blinding"])).hides
    facts: dict[str, Any] = {
        **figures,
        "hidden": hidden,
        "kind_said": {"rehearsal": "a rehearsal on simulated hardware"}.get(str(figures.get("kind"))),
        **{
            name: meta.get(name)
            for name in (
                "started_utc",
                "ended_utc",
                "positions_mm",
                "openings",
                "set_up",
                "software",
                "devices",
            )
        },
        "settings": {
            name: meta.get(name) for name in ("order", "dead_time_s", "dead_time_u_s", "dead_time_kind")
        },
        "bench": meta.get("bench_records"),
        "armed": meta.get("armed"),
        "laid_in": fact(meta, "notes.bench"),
        "history": live.get("history"),
        "rate": live.get("rate"),
        "once": _ends(figures.get("interval_95")),
        "whole": _ends(figures.get("whole_night_95")),
        "counted": _counted(meta, figures),
        "level": _level(live),
        "happened": happened(log),
        "marks": marks_h(log),
        "tonight": _tonight(meta, figures),
        "accepted": next((entry for entry in reversed(log) if entry["event"] == "verdict"), None),
        **_said(figures, hidden),
    }
    word, reasons = proposal(facts)
    return facts | {"proposal": {"verdict": word, "reasons": list(reasons)}}


def _said(figures: Mapping[str, Any], hidden: bool) -> dict[str, str | None]:
    """Return the sentences that depend on what may be told."""
    value, se = fact(figures, "kappa"), fact(figures, "kappa_se")
    known = value is not None and se is not None and figures.get("printable")
    name = "kappa + offset" if hidden else "kappa"
    told = f"{name} = ({1e4 * value:+.2f} ± {1e4 * se:.2f}) × 1e-4" if known else None
    ends = fact(figures, "interval_95")
    zero = None
    if known and ends and not hidden:
        inside = ends[0] <= 0 <= ends[1]
        zero = (
            "Zero lies inside the 95 % interval."
            if inside
            else "Zero lies outside the 95 % interval; look at the checks first."
        )
    blinded = {
        "open": None,
        "revealed": "The value was hidden by an additive offset until the analysis was frozen.",
    }.get(
        str(figures.get("blinding")),
        "This run is blinded: the value is moved by a hidden offset and rounded.",
    )
    limit = None if hidden else next(iter(closing_lines(dict(figures) | {"positions": None})), None)
    return {"told": told, "zero_said": zero, "blinded": blinded, "statement_said": limit}


def _ends(interval: Any) -> dict[str, float] | None:
    return None if not interval else {"low": interval[0], "high": interval[1]}


def _counted(meta: Mapping[str, Any], figures: Mapping[str, Any]) -> dict[str, Any]:
    places, slits = meta.get("positions_mm") or [], list((fact(meta, "set_up.slits") or {}).values())
    widths = {round(1e6 * slit["width_m"], 6) for slit in slits}
    steps = {round(1e6 * (b["centre_m"] - a["centre_m"]), 6) for a, b in pairwise(slits)}
    return {
        "openings": len(meta.get("openings") or []) or None,
        "positions": len(places) or None,
        "first_mm": min(places, default=None),
        "last_mm": max(places, default=None),
        "width_um": widths.pop() if len(widths) == 1 else None,
        "pitch_um": steps.pop() if len(steps) == 1 else None,
        "stands": (figures.get("stands_used") or 0) + (figures.get("stands_left_out") or 0) or None,
    }


def _level(live: Mapping[str, Any]) -> dict[str, float]:
    means = [one for one in fact(live, "rate.mean") or [] if one]
    return {"range_pc": 100 * (max(means) - min(means)) / means[0]} if means else {}


def _tonight(meta: Mapping[str, Any], figures: Mapping[str, Any]) -> dict[str, Any]:
    pilot = fact(meta, "bench_records.pilot.values") or {}
    se, goal, pairs = (fact(figures, name) for name in ("kappa_se", "goal_se", "pairs"))
    due = [
        task
        for task, record in (meta.get("bench_records") or {}).items()
        if due_at(record, str(meta.get("ended_utc") or ""))
    ]
    return {
        "pairs_to_goal": ceil(pairs * (se / goal) ** 2) if se and goal and pairs else None,
        "best_dwell_s": pilot.get("best_dwell_s"),
        "dwell_s": pilot.get("dwell_s"),
        "moves": figures.get("visits"),
        "counts": _counts(figures),
        "due": f"Bench tasks that are due again: {', '.join(due)}." if due else None,
    }


def _counts(figures: Mapping[str, Any]) -> float | None:
    """Return about how many counts the detector has seen: mean rate times live time."""
    rates = [one for row in fact(figures, "rates_hz") or [] for one in row if one is not None]
    live_s = fact(figures, "live_s")
    return None if not rates or live_s is None else sum(rates) / len(rates) * live_s


def _finite(value: Any) -> Any:
    """Return facts with None where a number is none: JSON knows no other."""
    if isinstance(value, Mapping):
        return {key: _finite(inner) for key, inner in value.items()}
    if isinstance(value, (list, tuple)):
        return [_finite(inner) for inner in value]
    return None if isinstance(value, float) and not isfinite(value) else value


def _live(folder: Path) -> dict[str, Any]:
    try:
        found = json.loads((folder / "live.json").read_text())
    except (OSError, ValueError):
        return {}
    return found if isinstance(found, dict) else {}
