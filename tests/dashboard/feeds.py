"""Plausible `live.json` of a Lantern-like night, the same for the same arguments."""

from __future__ import annotations

import json
import math
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
from scipy.special import stdtrit

from daq import openings
from daq.estimate import anytime_multiplier

START = datetime(2026, 12, 1, 20, 15, tzinfo=UTC)
PAIR_H = 0.521
WARNING = {
    "id": "level",
    "kind": "level",
    "level": "note",
    "in_doubt": False,
    "did": "The run goes on.",
    "cost": "",
    "acknowledged": None,
    "what": "The count rate fell by 5.5 % in 4.1 hours.",
    "do": "Nothing has to be done tonight; look at the source in the morning.",
    "good": "The order of measurement cancels a slow change, so kappa is still good.",
    "since_utc": "2026-12-02T00:12:00Z",
}


def feed(
    slits: int = 3,
    pairs: int = 12,
    planned: int = 19,
    positions: int = 41,
    seed: int = 7,
    columns: int = 120,
    **changed: Any,
) -> dict[str, Any]:
    """Return the feed of a night of which so many pairs are done; `changed` replaces whole keys."""
    generator = np.random.default_rng(seed)
    hours = (pairs + 0.4) * PAIR_H
    masks = list(range(1 << slits))
    place = np.linspace(-12.8, 12.8, positions)
    return {
        "format": 1,
        "run": f"20261201T201500Z-lantern-{slits}",
        "title": f"Lantern bench, {slits} slits in attenuated light",
        "state": "counting",
        "kind": "run",
        "clock": "real",
        "slits": slits,
        "started_utc": _utc(0),
        "run_s": 3600 * hours,
        "updated_utc": _utc(hours),
        "written_utc": datetime.now(UTC).isoformat(timespec="milliseconds"),
        "visit": _visit(slits, pairs, planned, positions),
        "ends_utc": _utc(planned * PAIR_H),
        "positions_mm": place.round(4).tolist(),
        "openings": masks,
        **_rates(slits, place, pairs, generator),
        **_kappa(pairs, planned, generator),
        "rate": _strip(hours, generator, columns),
        "sensors": {"room_temperature": [294.464, "K"], "room_pressure": [101324.0, "Pa"]},
        "warnings": [],
        "holding": None,
        "in_doubt": False,
        "log": [
            {"utc": _utc(0), "text": "The run started"},
            {"utc": _utc(2.03), "text": "The counter did not reply for 0.5 s; it replied again at once"},
        ],
        "budget": _budget(pairs),
        "normalisation": "pairwise",
        "blinding": "open",
        "ended": None,
        "truth_kappa": None,
        "estimator": "plain contrast",
        **changed,
    }


def put(lab: Path, content: dict[str, Any]) -> Path:
    """Write a feed where the page looks for it, replaced whole, and return the run's folder."""
    folder = lab / "runs" / str(content["run"])
    folder.mkdir(parents=True, exist_ok=True)
    passing = folder / "live.json.partial"
    passing.write_text(json.dumps(content), encoding="utf-8")
    passing.replace(folder / "live.json")
    return folder


def ended(complete: bool = True, **more: Any) -> dict[str, Any]:
    """Return the feed of a run that reached its planned end, or was ended by hand."""
    made = feed(pairs=19 if complete else 11, state="ended", **more)
    reason = "the itinerary is complete" if complete else "ended by hand after this stand"
    return made | {"ended": {"reason": reason, "utc": made["updated_utc"]}}


def _utc(hours: float) -> str:
    return (START + timedelta(hours=hours)).isoformat(timespec="seconds").replace("+00:00", "Z")


def _visit(slits: int, pairs: int, planned: int, positions: int) -> dict[str, Any]:
    per_pair = 2 * positions << slits
    number = min(round((pairs + 0.4) * per_pair), planned * per_pair - 1)
    return {
        "number": number,
        "of": planned * per_pair,
        "opening": 5 % (1 << slits),
        "position_mm": 3.2,
        "attempt": 1,
    }


def _rates(slits: int, place: Any, pairs: int, generator: np.random.Generator) -> dict[str, Any]:
    """Return Fraunhofer patterns of equal slits with counting noise, and the signed sum of what was drawn."""
    phase = 2 * math.pi * 120e-6 * place / 1000 / 1.2 / 532e-9
    single = np.sqrt(40e3) * np.sinc(40e-6 * place / 1000 / 1.2 / 532e-9)
    live_s = max(pairs, 1) * 2 * 2.2
    rates, signs = [], []
    for mask in range(1 << slits):
        waves = sum(
            (np.exp(1j * n * phase) for n in range(slits) if mask >> n & 1),
            np.zeros_like(phase, dtype=complex),
        )
        true = np.abs(single * waves) ** 2 + 800
        rates.append(generator.poisson(true * live_s) / live_s)
        signs.append(openings.sign(openings.name(mask), slits))
    errors = [np.sqrt(rate / live_s) for rate in rates]
    epsilon = sum(sign * rate for sign, rate in zip(signs, rates, strict=True))
    return {
        "rates_hz": [rate.round(3).tolist() for rate in rates],
        "rates_se_hz": [error.round(3).tolist() for error in errors],
        "epsilon_hz": np.asarray(epsilon).round(3).tolist(),
        "epsilon_se_hz": np.sqrt(sum(error**2 for error in errors)).round(3).tolist(),
    }


def _kappa(pairs: int, planned: int, generator: np.random.Generator) -> dict[str, Any]:
    blocks = generator.normal(0, 4.6e-4, planned)[:pairs]
    ends = [_ends(blocks[:n], planned) for n in range(1, pairs + 1)]
    value, se, inner, outer = ends[-1] if ends else (None, None, None, None)
    counting = 4.2e-4 / math.sqrt(pairs) if pairs else None
    return {
        "kappa": {
            "value": value,
            "se": se,
            "counting_se": counting,
            "interval_95": inner,
            "whole_night_95": outer,
            "pairs": pairs,
            "planned_pairs": planned,
            "excess": se / counting if se and counting else None,
            "excess_se": 0.17 if se else None,
            "goal_se": 1e-4,
            "forecast_se": se * math.sqrt(pairs / planned) if se else None,
            "printable": True,
        },
        "history": {
            "hours": [round((n + 1) * PAIR_H, 4) for n in range(pairs)],
            "kappa": [end[0] for end in ends],
            **{
                f"interval_{side}": [_end(end[2], i) for end in ends]
                for i, side in enumerate(("low", "high"))
            },
            **{f"whole_{side}": [_end(end[3], i) for end in ends] for i, side in enumerate(("low", "high"))},
        },
    }


def _ends(blocks: Any, planned: int) -> tuple[float, float | None, list[float] | None, list[float] | None]:
    many, value = len(blocks), float(np.mean(blocks))
    if many < 2:
        return value, None, None, None
    se = float(np.std(blocks, ddof=1)) / math.sqrt(many)
    half, wide = float(stdtrit(many - 1, 0.975)) * se, anytime_multiplier(many, planned) * se
    return (
        value,
        se,
        [value - half, value + half],
        [value - wide, value + wide] if math.isfinite(wide) else None,
    )


def _budget(pairs: int) -> dict[str, Any] | None:
    """Return the lines of a night whose counting rules, and what the service adds them up to."""
    if pairs < 2:
        return None
    lines = (
        ("counting", 1.05e-4, "random", "Four times the counts: four such nights, or a brighter source."),
        ("background", 6.4e-6, "part", "Four times the dwell on `none`, or a quarter of the background."),
        ("source beyond counting", 3.1e-5, "random", "A stand in a quarter of the time, or a monitor."),
        ("smooth drift, missing visits", 5e-10, "systematic", "Fewer stands left out."),
        ("dead time", 2.2e-6, "systematic", "The dead time measured twice as well, or half the rate."),
    )
    keys = ("name", "value", "kind", "halve")
    return {"lines": [dict(zip(keys, line, strict=True)) for line in lines], "total_se": 1.1e-4}


def _end(ends: list[float] | None, side: int) -> float | None:
    return None if ends is None else ends[side]


def _strip(hours: float, generator: np.random.Generator, columns: int) -> dict[str, list[float]]:
    """Return a rate that wanders by a percent, with one short dip early in the night."""
    walk = 41e3 * (1 + 0.01 * np.cumsum(generator.normal(0, 1, columns)) / math.sqrt(columns))
    low, high = walk - generator.uniform(60, 180, columns), walk + generator.uniform(60, 180, columns)
    low[columns // 3] = 29.6e3
    at = np.linspace(hours / columns, hours, columns)
    return {
        "hours": at.round(4).tolist(),
        "low": low.round(1).tolist(),
        "mean": walk.round(1).tolist(),
        "high": high.round(1).tolist(),
    }
