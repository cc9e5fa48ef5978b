"""What the page says about where the error of kappa comes from."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from dashboard.residual import PRINTED_FROM_PAIR, is_blinded, unit
from dashboard.words import NB, decimals_of, fixed

SMALL = 0.05  # of the whole error: lines below it are told in one sentence
_NAMES = {
    "smooth drift, missing visits": "slow drift and missing visits",
    "source beyond counting": "the source",
}


def budget_view(feed: Mapping[str, Any]) -> dict[str, Any] | None:
    """Return the lines of the error budget, largest first, and what would make the largest one smaller.

    None while the run is blinded, or too young for an error bar to be printed.
    """
    found, kappa = feed.get("budget"), feed["kappa"]
    if is_blinded(feed) or not found or not found["total_se"] or kappa["pairs"] < PRINTED_FROM_PAIR:
        return None
    total = found["total_se"]
    own = sorted((line for line in found["lines"] if line["kind"] != "part"), key=lambda line: -line["value"])
    large = [line for line in own if line["value"] > SMALL * total]
    return {
        "lines": [_line(line, kappa, total) for line in large],
        "says": [
            *_rest(own, large),
            *(f"To make it smaller: {line['halve']}" for line in own[:1]),
        ],
    }


def _line(line: Mapping[str, Any], kappa: Mapping[str, Any], total: float) -> dict[str, Any]:
    return {
        "name": _name(line),
        "value": f"±{NB}{_in_unit(line['value'], kappa)}",
        "percent": round(100 * min(line["value"] / total, 1.0), 1),
    }


def _rest(own: list[dict[str, Any]], large: list[dict[str, Any]]) -> list[str]:
    small = [_name(line) for line in own if line not in large]
    return [f"Below a twentieth of the whole: {'; '.join(small)}."] if small else []


def _name(line: Mapping[str, Any]) -> str:
    return _NAMES.get(line["name"], line["name"])


def _in_unit(value: float, kappa: Mapping[str, Any]) -> str:
    scale = unit(kappa)[0]
    return fixed(value / scale, decimals_of(value / scale))
