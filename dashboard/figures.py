"""Curves of the page, rounded and small, each with the sentence that says what it shows."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Any

import numpy as np

from daq import openings
from daq.estimate.shown import HIDDEN_ORDER
from dashboard.bands import BAND_FROM_PAIR, INNER, OUTER, first_band_pair, whole_night
from dashboard.residual import is_blinded, unit
from dashboard.words import fixed, spelt

Feed = Mapping[str, Any]
Column = Sequence[float | None]
_PLATE_POINTS = 61
_FULL = 1000


def night(feed: Feed) -> dict[str, Any]:
    """Return kappa by pair with both bands, the forecast to the planned end, and how far the axis reaches.

    Values are in the printed unit of kappa, times in hours since the start. `interval` and `whole` are the
    half widths of the two bands, which lie evenly about the dot.
    """
    kappa, history = feed["kappa"], feed["history"]
    scale, name = unit(kappa)
    end = _planned_hours(feed)
    if is_blinded(feed):
        return {"unit": name, "end": end, "empty": "κ is hidden while the run is blinded."}
    if not history["kappa"]:
        return {"unit": name, "end": end, "empty": "The first dot appears when the first pair is complete."}
    if kappa["value"] is None:
        return {"unit": name, "end": end, "empty": "κ cannot be worked out from what is counted so far."}
    reach = _reach(history, kappa["goal_se"] or 0)
    return {
        "unit": name,
        "end": end,
        "hours": _rounded(history["hours"], 1, history["hours"][-1]),
        "kappa": _rounded(history["kappa"], scale, reach),
        "interval": _rounded(_half(history, "interval_high"), scale, reach),
        "whole": _rounded(_from_sixth(_half(history, "whole_high"), kappa["pairs"]), scale, reach),
        "forecast": _forecast(feed, scale, end),
        "reach": round(reach / scale, 3),
        "inner": INNER,
        "outer": OUTER,
        "caption": _night_caption(feed),
        "alt": _night_alt(feed, scale, name),
    }


def pattern(feed: Feed, chosen: int) -> dict[str, Any]:
    """Return the measured pattern of one opening, its prediction from the others, and what is left over.

    The prediction is rate - sign * epsilon, the leftover sign * epsilon, both with the error of epsilon.
    """
    slits, masks = feed["slits"], feed["openings"]
    opening = openings.name(chosen)
    sign = openings.sign(opening, slits)
    hidden = is_blinded(feed)
    said = {"mask": chosen, "name": opening, "added": sign > 0, "positions": feed["positions_mm"]}
    if _is_hidden(feed, chosen):
        return said | {"empty": f"The pattern of {opening} is hidden while the run is blinded."}
    rates = feed["rates_hz"][masks.index(chosen)]
    if all(rate is None for rate in rates):
        return said | {"empty": f"{opening} has not been counted yet."}
    scale, word = _rate_unit(rates)
    said |= {"unit": word, "measured": _scaled(rates, scale)}
    if hidden or all(value is None for value in feed["epsilon_hz"]):
        return said | {"alt": _peak_says(opening, feed["positions_mm"], rates)}
    return said | _leftover(feed, opening, rates, scale)


def plates(feed: Feed) -> dict[str, list[int | None]]:
    """Return the small patterns of all openings, by bit mask: thousandths of the greatest amplitude.

    Heights are the square root of the rate, so that one slit is still seen beside all of them.
    """
    hidden = {mask for mask in feed["openings"] if _is_hidden(feed, mask)}
    rows = [
        row if mask not in hidden else []
        for mask, row in zip(feed["openings"], feed["rates_hz"], strict=True)
    ]
    top = max((np.nanmax(np.asarray(row, dtype=float), initial=0) for row in rows), default=0) or 1
    return {str(mask): _silhouette(row, top) for mask, row in zip(feed["openings"], rows, strict=True)}


def _is_hidden(feed: Feed, mask: int) -> bool:
    """Return whether the pattern of an opening would give kappa away."""
    return is_blinded(feed) and mask.bit_count() >= HIDDEN_ORDER


def strip(feed: Feed) -> dict[str, Any]:
    """Return the count rate by column of time: least, mean and most, so that every dip is kept."""
    rate = feed["rate"]
    if not rate["hours"]:
        return {"empty": "The first column appears after the first stand."}
    scale, word = _strip_unit(feed)
    span = max(rate["high"]) - min(rate["low"])
    return {
        "unit": word,
        "hours": _rounded(rate["hours"], 1, rate["hours"][-1]),
        **{key: _rounded(rate[key], scale, span) for key in ("low", "mean", "high")},
        "tinted": _tinted(feed),
        "caption": "Line: mean. Band: least and most of each stretch of time, so that no dip is lost.",
        "alt": _strip_alt(rate, scale, word),
    }


def _scaled(values: Column, scale: float, digits: int = 4) -> list[float | None]:
    return [None if v is None else float(f"{v / scale:.{digits}g}") for v in values]


def _rounded(values: Column, scale: float, span: float) -> list[float | None]:
    """Return values in a unit, rounded to a thousandth of what the curve spans, or finer."""
    decimals = max(0, 3 - math.floor(math.log10(span / scale))) if span > 0 else 3
    rounded = np.round(np.asarray(values, dtype=float) / scale, decimals)
    return [None if value != value else value for value in rounded.tolist()]  # NaN is not itself


def _half(history: Mapping[str, Column], high: str) -> list[float | None]:
    ends = zip(history[high], history["kappa"], strict=True)
    return [None if end is None or dot is None else end - dot for end, dot in ends]


def _planned_hours(feed: Feed) -> float | None:
    if feed["ended"]:
        return None
    span = datetime.fromisoformat(feed["ends_utc"]) - datetime.fromisoformat(feed["started_utc"])
    return round(span.total_seconds() / 3600, 3)


def _forecast(feed: Feed, scale: float, end: float | None) -> dict[str, Any] | None:
    """Return the half width of the inner bar at the planned end, and the one the goal asks for."""
    kappa = feed["kappa"]
    if feed["ended"] or end is None or not kappa["forecast_se"] or whole_night(kappa) is None:
        return None
    from scipy.special import stdtrit

    wide = float(stdtrit(max(1, kappa["planned_pairs"] - 1), 0.975))
    goal = kappa["goal_se"]
    return {
        "half": round(wide * kappa["forecast_se"] / scale, 3),
        "goal": round(wide * goal / scale, 3) if goal else None,
        "pairs": kappa["pairs"],
        "planned": kappa["planned_pairs"],
    }


def _from_sixth(half: Column, pairs: int) -> Column:
    """Leave out what lies before pair 6; a history that was thinned is too long to have a band there."""
    early = BAND_FROM_PAIR - 1 if len(half) == pairs else 0
    return [*(None for _ in half[:early]), *half[early:]]


def _reach(history: Mapping[str, Column], goal: float) -> float:
    """Return how far the axis goes: all dots, and three quarters of the outer band, wide as it starts."""
    dots = [abs(v) for v in history["kappa"] if v is not None]
    bands = [abs(v) for key in ("whole_low", "whole_high") for v in history[key] if v is not None]
    wide = sorted(bands)[(3 * len(bands)) // 4] if bands else 0.0
    return 1.1 * max(*dots, wide, 3 * goal)


def _night_caption(feed: Feed) -> str:
    kappa = feed["kappa"]
    start = first_band_pair(kappa["planned_pairs"])
    dots = "Each dot holds all pairs up to then."
    if whole_night(kappa) is None:
        return f"{dots} The bands start at pair {start}." if start else dots
    rest = "" if feed["ended"] else " Dotted: what the rest of the run will do to the dark band."
    return f"{dots} Dark: {INNER}. Pale: {OUTER}.{rest}"


def _night_alt(feed: Feed, scale: float, name: str) -> str:
    kappa = feed["kappa"]
    dot = f"κ after {spelt(kappa['pairs'], 'pair')}: {fixed(kappa['value'] / scale, 1, plus=True)} {name}."
    ends = whole_night(kappa)
    if ends is None:
        return f"{dot} No band yet."
    low, high = (fixed(v / scale, 1, plus=True) for v in ends)
    return f"{dot} The whole-night band reaches from {low} to {high}."


def _rate_unit(values: Column) -> tuple[float, str]:
    top = max((abs(v) for v in values if v is not None), default=0)
    return (1e3, "thousand counts per second") if top >= 2000 else (1.0, "counts per second")


def _leftover(feed: Feed, opening: str, rates: Column, scale: float) -> dict[str, Any]:
    sign = openings.sign(opening, feed["slits"])
    epsilon = [None if e is None else sign * e for e in feed["epsilon_hz"]]
    predicted = [None if r is None or e is None else r - e for r, e in zip(rates, epsilon, strict=True)]
    said = _leftover_says(feed, epsilon)
    small, word = _rate_unit(epsilon)
    others = spelt(len(feed["openings"]) - 1, "opening").split()[0]
    peak = _peak_says(opening, feed["positions_mm"], rates)
    return {
        "predicted": _scaled(predicted, scale),
        "leftover_unit": word,
        "leftover": _scaled(epsilon, small, 3),
        "leftover_se": _scaled(feed["epsilon_se_hz"], small, 3),
        "caption": f"Line: {opening} as measured. Broad grey line: predicted from the other {others}. "
        f"Below, what is left over, with one standard error on either side. {said}",
        "alt": f"{peak} Against the prediction from the other {others}: {said}",
    }


def _leftover_says(feed: Feed, epsilon: Column) -> str:
    if feed["slits"] == 2:
        return "With two slits it is the interference itself."
    rows = zip(feed["positions_mm"], epsilon, feed["epsilon_se_hz"], strict=True)
    pulls = [(abs(e) / s, x) for x, e, s in rows if e is not None and s]
    if not pulls:
        return "No error bar is known yet."
    inside = sum(pull <= 1 for pull, _ in pulls)
    worst, place = max(pulls)
    return (
        f"At {inside} of {len(pulls)} positions it is zero within that error (two in three by chance), "
        f"the farthest {fixed(worst, 1)} standard errors off, at {fixed(place, 2, plus=True)} mm."
    )


def _peak_says(opening: str, positions: Sequence[float], rates: Column) -> str:
    scale, word = _rate_unit(rates)
    top, place = max((r, x) for r, x in zip(rates, positions, strict=True) if r is not None)
    where = f"{fixed(place, 2, plus=True)} mm"
    return f"Pattern of {opening}: highest at {where} with {fixed(top / scale, 1)} {word}."


def _silhouette(row: Column, top: float) -> list[int | None]:
    rates = np.asarray(row, dtype=float)
    step = max(1, math.ceil(rates.size / _PLATE_POINTS))
    most = np.fmax.reduceat(rates, np.arange(0, rates.size, step)) if rates.size else rates
    heights = _FULL * np.sqrt(np.maximum(most, 0) / top)
    return [None if height != height else round(height) for height in heights.tolist()]


def _strip_unit(feed: Feed) -> tuple[float, str]:
    """Return the unit of the strip; blinded, a relative one: the total would give the hidden opening back."""
    if not is_blinded(feed):
        return _rate_unit(feed["rate"]["high"])
    return float(np.mean(feed["rate"]["mean"])) / 100, "percent of the mean so far"


def _tinted(feed: Feed) -> list[float]:
    start = datetime.fromisoformat(feed["started_utc"])
    since = (datetime.fromisoformat(warning["since_utc"]) - start for warning in feed["warnings"])
    return [max(0.0, round(span.total_seconds() / 3600, 3)) for span in since]


def _strip_alt(rate: Mapping[str, Column], scale: float, word: str) -> str:
    last = next(v for v in reversed(rate["mean"]) if v is not None)
    least = min(v for v in rate["low"] if v is not None)
    most = max(v for v in rate["high"] if v is not None)
    return (
        f"Count rate, {word}: now {fixed(last / scale, 1)}, least {fixed(least / scale, 1)}, "
        f"most {fixed(most / scale, 1)} since the start."
    )
