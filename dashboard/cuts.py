"""What the page says of slits that were cut apart: the residual with them accounted for, and the spectrum."""

from __future__ import annotations

from collections.abc import Mapping
from math import log10
from typing import Any

from dashboard.residual import PRINTED_FROM_PAIR, is_blinded, unit
from dashboard.words import NB, decimals_of, fixed

TALLEST = 1e5  # power of a full column; the scale is logarithmic, from a tenth of counting noise


def cuts_view(feed: Mapping[str, Any]) -> dict[str, Any] | None:
    """Return kappa after and before, what to look at, and the spectrum of epsilon as heights in percent.

    None where all openings share their slits, while the run is blinded, or too young for an error bar.
    """
    found, kappa = feed.get("geometry"), feed["kappa"]
    if not found or is_blinded(feed) or kappa["pairs"] < PRINTED_FROM_PAIR:
        return None
    spectrum = found["spectrum"]
    return {
        "figures": [
            _figure("Accounted for", found["kappa"], found["kappa_se"], kappa),
            _figure("Before", found["kappa_before"], found["counting_se"], kappa),
            *_joint(found, kappa),
        ],
        "says": _says(found),
        "columns": [
            [_height(before), _height(after)]
            for before, after in zip(spectrum["before"], spectrum["after"], strict=True)
        ],
        "lines": [
            {"name": line["name"], "before": _power(line["before"]), "after": _power(line["after"])}
            for line in spectrum["lines"]
        ],
    }


def _joint(found: Mapping[str, Any], kappa: Mapping[str, Any]) -> list[dict[str, str]]:
    if found["joint_kappa"] is None:
        return []
    return [_figure("All patterns together", found["joint_kappa"], found["joint_se"], kappa)]


def _figure(name: str, value: float, se: float, kappa: Mapping[str, Any]) -> dict[str, str]:
    scale, words = unit(kappa)[:2]
    decimals = decimals_of(se / scale)
    shown = f"{fixed(value / scale, decimals)} ± {fixed(se / scale, decimals)}"
    return {"name": name, "value": f"{shown}{NB}{words}"}


def _says(found: Mapping[str, Any]) -> list[str]:
    if not found["joint_fits"]:
        return ["Look at this: slits, light and visibility do not explain the patterns; something else acts."]
    if found["differ"]:
        return ["Look at this: contrast and all patterns together differ by more than three standard errors."]
    return ["Slits, light and visibility explain the patterns."]


def _height(power: float) -> float:
    return round(100 * min(max(log10(max(power, 1e-9) / 0.1) / log10(TALLEST / 0.1), 0.0), 1.0), 1)


def _power(power: float) -> str:
    return f"{power:.0f}" if power >= 10 else f"{power:.1f}"
