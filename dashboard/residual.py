"""What the page says about kappa: figure, unit, both bands, zero, goal and scatter."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from daq.estimate.blinding import Blinding
from dashboard.bands import INNER, OUTER, band_to_read, first_band_pair, whole_night
from dashboard.words import NB, count, decimals_of, fixed, unit_of

Feed = Mapping[str, Any]
_ORDINALS = {2: "Second", 3: "Third", 4: "Fourth", 5: "Fifth"}
PRINTED_FROM_PAIR = 8


def residual_view(feed: Feed) -> dict[str, Any]:
    """Return everything the page says about kappa; nothing of its value while the run is blinded."""
    kappa = feed["kappa"]
    said: dict[str, Any] = {
        "heading": f"{_ORDINALS[feed['slits']]}-order {'residual' if feed['slits'] > 2 else 'term'}, κ",
        "figure": None,
        "se": None,
        "bands": [],
        "rule": None,
    }
    if is_blinded(feed):
        return said | {
            "short": "Hidden",
            "se": _bar(kappa),
            "unit": _after(kappa, f"{unit(kappa)[1]}, one standard error"),
            "says": ["κ is hidden: this run is blinded.", *_goal_says(feed)],
        }
    if kappa["pairs"] < 2 or kappa["value"] is None:
        return said | {"short": "Not yet", "unit": _after(kappa), "says": [_waiting_says(kappa)]}
    if not kappa["printable"]:
        return said | {"short": "Not printed", "unit": _after(kappa), "says": [_WEAK]}
    if kappa["pairs"] < PRINTED_FROM_PAIR:
        return said | {"short": "Too early", "unit": _after(kappa), "says": _early_says(feed)}
    return said | _figure(feed)


def is_blinded(feed: Feed) -> bool:
    """Return whether kappa, and what gives it away, must not leave this process."""
    return Blinding(str(feed.get("blinding"))).hides


def unit(kappa: Mapping[str, Any]) -> tuple[float, str]:
    """Return the unit of the printed kappa: that of the goal, or of the forecast where they are far apart."""
    goal, forecast = kappa.get("goal_se"), kappa.get("forecast_se")
    if goal and forecast:
        return unit_of(goal if 0.2 < forecast / goal < 5 else forecast)
    return unit_of(goal or forecast or kappa.get("se") or 1e-3)


_WEAK = (
    "The interference is too weak to divide by (δ is below six of its standard errors), so κ is not printed. "
    "Check that all slits are lit and that the mask is in register."
)


def _after(kappa: Mapping[str, Any], unit_name: str = "") -> str:
    pairs = f"after {kappa['pairs']} of {count(kappa['planned_pairs'])} pairs"
    return f"{unit_name}, {pairs}" if unit_name else pairs


def _waiting_says(kappa: Mapping[str, Any]) -> str:
    return f"κ needs two complete pairs; so far there {_are(kappa['pairs'])}."


def _are(pairs: int) -> str:
    return "is one" if pairs == 1 else "are none"


def _early_says(feed: Feed) -> list[str]:
    kappa = feed["kappa"]
    scale, name = unit(kappa)
    dot = fixed(kappa["value"] / scale, 1, plus=True)
    return [
        f"The dot stands at {dot} {name.split(' (')[0]}.",
        *_band_start(kappa),
        f"The error bar gets a number at pair {PRINTED_FROM_PAIR}.",
        *_goal_says(feed),
    ]


def _band_start(kappa: Mapping[str, Any]) -> list[str]:
    if whole_night(kappa) is not None:
        return []
    start = first_band_pair(kappa["planned_pairs"])
    if start is None:
        return ["The run is too short for a band that holds over the whole night."]
    return [f"The band starts at pair {start}."]


def _figure(feed: Feed) -> dict[str, Any]:
    kappa = feed["kappa"]
    scale, name = unit(kappa)
    decimals = decimals_of(kappa["se"] / scale)
    says = [*_zero_says(feed), *_band_start(kappa), *_goal_says(feed), *_scatter_says(kappa, scale)]
    return {
        "short": None,
        "figure": fixed(kappa["value"] / scale, decimals, plus=True),
        "se": _bar(kappa),
        "unit": _after(kappa, f"{name} ± one standard error"),
        "bands": _bands(feed, scale, decimals),
        "says": [*says, *_truth_says(feed, scale, name, decimals)],
    }


def _bar(kappa: Mapping[str, Any]) -> str | None:
    if not kappa["se"] or kappa["pairs"] < PRINTED_FROM_PAIR:
        return None
    scale, _ = unit(kappa)
    return fixed(kappa["se"] / scale, decimals_of(kappa["se"] / scale))


def _bands(feed: Feed, scale: float, decimals: int) -> list[dict[str, Any]]:
    kappa = feed["kappa"]
    drawn = [("outer", kappa["whole_night_95"], OUTER), ("inner", kappa["interval_95"], INNER)]
    drawn.sort(key=lambda band: band[0] != band_to_read(feed))
    reach = 1.1 * max((abs(v) for _, ends, _ in drawn if ends for v in ends), default=1.0)
    return [
        {
            "kind": kind,
            "label": label,
            "ends": " … ".join(fixed(v / scale, decimals, plus=True) for v in ends),
            "read": kind == band_to_read(feed),
            "from_percent": round(50 + 50 * ends[0] / reach, 1),
            "to_percent": round(50 + 50 * ends[1] / reach, 1),
        }
        for kind, ends, label in drawn
        if ends is not None
    ]


def _zero_says(feed: Feed) -> list[str]:
    kappa = feed["kappa"]
    if feed["slits"] == 2:
        return ["With two slits this term is the interference itself; it is not expected to vanish."]
    inner = band_to_read(feed) == "inner"
    ends = kappa["interval_95"] if inner else kappa["whole_night_95"]
    if ends is None:
        return []
    band = "95 % interval at the planned end" if inner else "whole-night band"
    if ends[0] <= 0 <= ends[1]:
        return [f"Zero lies inside the {band}."]
    return [f"Zero lies outside the {band}. Look for a cause in the instrument first."]


def _goal_says(feed: Feed) -> list[str]:
    kappa = feed["kappa"]
    goal, forecast = kappa["goal_se"], kappa["se"] if feed["ended"] else kappa["forecast_se"]
    if not goal or not forecast:
        return []
    scale, _ = unit(kappa)
    decimals = decimals_of(goal / scale)
    if kappa["pairs"] < PRINTED_FROM_PAIR and not feed["ended"]:
        return [f"Whether its goal of ±{NB}{fixed(goal / scale, decimals)} will be met is said from then on."]
    ends = f"±{NB}{fixed(forecast / scale, decimals)}"
    aim = f"±{NB}{fixed(goal / scale, decimals)}"
    if feed["ended"]:
        word = "meets" if forecast <= goal else "misses"
        return [f"The run ended with {ends}; that {word} the goal of {aim}."]
    if forecast <= goal:
        return [f"At this pace the run ends with {ends} and meets its goal of {aim}."]
    needed = math.ceil(kappa["planned_pairs"] * (forecast / goal) ** 2)
    near = "just short of" if forecast <= 1.2 * goal else "short of"
    return [
        f"At this pace the run ends with {ends}, {near} the goal of {aim}; "
        f"the goal would take about {needed} pairs instead of {kappa['planned_pairs']}."
    ]


def _scatter_says(kappa: Mapping[str, Any], scale: float) -> list[str]:
    if not kappa["excess"] or not kappa["counting_se"]:
        return []
    counting = kappa["counting_se"] / scale
    se = f"{NB}±{NB}{fixed(kappa['excess_se'], 1)}" if kappa["excess_se"] else ""
    return [
        f"Counting alone would give ±{NB}{fixed(counting, decimals_of(counting))}; "
        f"the pairs scatter {fixed(kappa['excess'], 1)}{se} times as much."
    ]


def _truth_says(feed: Feed, scale: float, name: str, decimals: int) -> list[str]:
    truth = feed.get("truth_kappa")
    if truth is None:
        return []
    word = name.split(" (", maxsplit=1)[0]
    return [f"The simulated source was given κ = {fixed(truth / scale, decimals, plus=True)} {word}."]
