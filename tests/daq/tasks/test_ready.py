"""Ready: how windows stand by their flanks, and what is counted without light, from a known truth."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy.special import ndtr

from daq.records import CLOSED_VISIT, DARK_VISIT, FLANK_VISIT
from daq.tasks.contract import Ask, Taken
from daq.tasks.ready import Readiness, readiness, ready_visits
from tests.daq.tasks.made import drawn

EDGE_MM, WIDTH_MM, HEIGHT, BEHIND = 0.03, 1.2, 8000.0, 160.0  # register counts for 0.2 s a place
CENTRES_MM = {"A": 2.0, "AB": 4.0, "C": 14.0, "key": 18.4}


def window(centre_mm: float) -> dict[str, Any]:
    return {
        "centre_mm": centre_mm,
        "width_mm": WIDTH_MM,
        "edge_mm": EDGE_MM,
        "height": HEIGHT,
        "background": BEHIND,
    }


RECORDS: dict[str, dict[str, Any]] = {
    "register": {
        "values": {
            "up": {name: window(at) for name, at in CENTRES_MM.items()},
            "position_mm": 0.0,
            "margin_mm": {"A": 0.4, "AB": 0.4, "C": 0.4},
        }
    },
    "dark": {
        "record": "dark/1",
        "values": {"closed_hz": 800.0, "dark_hz": 50.0},
        "se": {"closed_hz": 1.0, "dark_hz": 0.5},
    },
}
ASKS = ready_visits(RECORDS, (0.0, 20.0), 3.0, shutter=False)


def light_hz(ask: Ask, off_mm: float = 0.0, passed: float = 1.0) -> float:
    """Return the rate of a visit when the whole mask stands off by some way."""
    if ask.place_mm is None:
        return 800.0 * passed
    centre = min(CENTRES_MM.values(), key=lambda at: abs(at - float(ask.place_mm or 0.0)))
    away = ask.place_mm + off_mm - centre
    half = WIDTH_MM / 2
    share = ndtr((away + half) / EDGE_MM) - ndtr((away - half) / EDGE_MM)
    return float(passed * (HEIGHT * share + BEHIND) / 0.2)


def found(seed: int, off_mm: float = 0.0, passed: float = 1.0) -> Readiness:
    return readiness(
        RECORDS, drawn(ASKS, lambda ask: light_hz(ask, off_mm, passed), np.random.default_rng(seed))
    )


def test_the_first_and_the_last_window_are_come_to_from_below_and_the_key_is_none() -> None:
    flanks = [ask for ask in ASKS if ask.reason == FLANK_VISIT]

    assert [(ask.role, ask.place_mm) for ask in flanks] == [
        ("left A", 1.4),
        ("right A", 2.6),
        ("left C", 13.4),
        ("right C", 14.6),
    ]
    assert all((ask.via_mm or 0.0) < (ask.place_mm or 0.0) for ask in flanks)
    assert (ASKS[-1].reason, ASKS[-1].position_mm) == (CLOSED_VISIT, 3.0)


def test_with_a_shutter_the_beam_is_open_for_the_flanks_and_shut_for_the_dark() -> None:
    *flanks, last = ready_visits(RECORDS, (0.0, 20.0), 3.0, shutter=True)

    assert {ask.beam for ask in flanks} == {"open"}
    assert (last.reason, last.beam) == (DARK_VISIT, "shut")


def test_a_mask_in_its_place_is_in_order_whatever_the_source_does() -> None:
    for seed, passed in enumerate((1.0, 0.6, 0.9)):
        good = found(seed, passed=passed)

        assert (good.astray, good.bright) == ("", "")
        assert "A stands" in good.said and "C stands" in good.said
        assert "800 by dark/1" in good.said


@pytest.mark.parametrize("off_mm", [0.04, -0.04, 0.3, 2.4])
def test_a_mask_that_has_crept_off_is_told_with_how_far(off_mm: float) -> None:
    crept = found(4, off_mm=off_mm)

    if abs(off_mm) < 1:
        assert crept.astray.startswith("The mask is off its place: A stands at least 30 um off its middle")
    else:  # both windows dark: that is for the rule of dark stands
        assert "no light on the flanks of A and C" in crept.said


def test_one_dark_window_is_a_mask_off_its_place() -> None:
    def rate_hz(ask: Ask) -> float:
        return 800.0 if ask.role.endswith(" C") else light_hz(ask)

    taken = drawn(ASKS, rate_hz, np.random.default_rng(5))

    assert "C is dark on both flanks" in readiness(RECORDS, taken).astray


def test_the_balance_is_as_exact_as_its_counts() -> None:
    offs = []
    for seed in range(300):
        said = found(seed).said
        offs.append(float(said.split("A stands ")[1].split(" +- ")[0].replace("−", "-")))

    # w / (2 sqrt(N)) with N = 2 x half of 40 kHz x 2 s, and twice the counts behind in the variance
    total, behind, ramp_um = 8e4, 1.6e3, 30 * np.sqrt(2 * np.pi)
    said_um = ramp_um / (2 * total) * np.sqrt(total + 2 * behind)
    assert abs(np.mean(offs)) < 4 * said_um / np.sqrt(300) + 0.05  # they are told to 0.1 um
    assert abs(np.std(offs) / np.hypot(said_um, 0.1 / np.sqrt(12)) - 1) < 4 / np.sqrt(600)


def test_a_detector_that_is_lit_is_told_and_holds_nothing() -> None:
    taken: list[Taken] = drawn(
        ASKS, lambda ask: 5000.0 if ask.place_mm is None else light_hz(ask), np.random.default_rng(6)
    )

    lit = readiness(RECORDS, taken)

    assert lit.astray == ""
    assert "Too bright without light: " in lit.bright
    assert "(800 by dark/1)" in lit.bright


def test_without_records_only_the_dark_is_counted() -> None:
    asks = ready_visits({}, (0.0, 20.0), 3.0, shutter=False)

    bare = readiness({}, drawn(asks, lambda ask: 800.0, np.random.default_rng(7)))

    assert len(asks) == 1
    assert bare.said.startswith("no record of register, so no flank was looked at; ")
    assert (bare.astray, bare.bright) == ("", "")
