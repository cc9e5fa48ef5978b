"""Dark: what the detector counts without a beam, and what passes the mask with every slit shut.

A check and an alarm reference: the night subtracts its own visits at `none`, never this value.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from math import sqrt

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.counting import chance_of_more
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, once
from daq.tasks.panels import Curve, Panel, level
from daq.tasks.turns import light_room, told_once
from daq.tasks.verdicts import fits

DWELL_S, ROUNDS, PLACES, ROOM_ROUNDS = 10.0, 5, 5, 2
ONE_SIDED_95, ONE_IN_TWENTY = 1.645, 0.05  # of a normal distribution; what it leaves above
CLOSED, DARK, NIGHT, LIT = "closed", "dark", "room at night", "room lit"

Figures = dict[str, float | None]  # by name; None for what this rig cannot tell


def decision_and_limit(dark_hz: float, dark_s: float, closed_s: float) -> tuple[float, float]:
    """Return decision threshold and detection limit of a rate above the dark one [1/s], 5 % errors each.

    Notes
    -----
    The limit is that of counts: the variance of what is to be detected counts too.

    References
    ----------
    .. [1] ISO 11929, gross and background counting; the forms of Anal. Chem. 40, 586 (1968), from memory.
    """
    decision = ONE_SIDED_95 * sqrt(dark_hz * (1 / closed_s + 1 / dark_s))
    return decision, ONE_SIDED_95**2 / closed_s + 2 * decision


def _visits(setting: Setting) -> Sequence[Ask]:
    """Return closed and dark visits in turn and back, at places over the range of the detector."""
    places = np.linspace(*_range_mm(setting), PLACES)
    one = [CLOSED, DARK, DARK, CLOSED] if setting.shutter else [CLOSED, CLOSED]
    found = [
        Ask(role, DWELL_S, float(place), 0, beam=setting.shut_beam if role == DARK else setting.open_beam)
        for _ in range(ROUNDS)
        for place in places
        for role in one
    ]
    return [*found, *_room(setting, float(np.median(places)))]


def _room(setting: Setting, place_mm: float) -> Sequence[Ask]:
    """Return visits with the room dark and lit, dark again at the end; none without a light to switch."""
    if not setting.rig.by_hand.room_light:
        return []
    return told_once(
        Ask(role, DWELL_S, place_mm, 0, beam=setting.open_beam, turn=light_room(role == LIT))
        for _ in range(ROOM_ROUNDS)
        for role in (NIGHT, LIT, LIT, NIGHT)
    )


def _range_mm(setting: Setting) -> tuple[float, float]:
    places = setting.measurement.positions.places_mm
    return min(places), max(places)


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    counts = {role: _counts(taken, role) for role in (CLOSED, DARK)}
    room = {role: _counts(taken, role) for role in (NIGHT, LIT)}
    values, se = _figures(counts)
    chi2, dof = _even([table for table in counts.values() if len(table)])
    verdict = fits(chi2, dof)
    even = "even over place and time" if verdict == "pass" else "not even over place and time: look for light"
    apart, lit = _apart(values, setting.shutter), _lit(room, values, se)
    return Outcome(
        values=values,
        se=se,
        verdict=verdict,
        sentence=(
            f"With every slit shut the detector counts {values['closed_hz']:.4g} +- {se['closed_hz']:.2g} a "
            f"second{apart}; {even}{lit}."
        ),
        model="even rate",
        panels=(
            _panel("Beam on and every slit shut; beam off", taken, counts),
            *((_panel("The room", taken, room),) if len(room[LIT]) else ()),
        ),
        chi2=chi2,
        dof=dof,
    )


def _figures(counts: Mapping[str, FloatArray]) -> tuple[Figures, Figures]:
    """Return what is counted behind shut slits and in the dark, with errors; without a shutter the first."""
    closed_hz, closed_se = _rate(counts[CLOSED])
    values: Figures = {"closed_hz": closed_hz, "dark_hz": None, "leak_hz": None}
    se: Figures = {"closed_hz": closed_se, "dark_hz": None, "leak_hz": None}
    if len(counts[DARK]):
        dark_hz, dark_se = _rate(counts[DARK])
        limits = decision_and_limit(dark_hz, counts[DARK][:, 1].sum(), counts[CLOSED][:, 1].sum())
        values |= {"dark_hz": dark_hz, "leak_hz": closed_hz - dark_hz}
        values |= {"decision_hz": limits[0], "detection_limit_hz": limits[1]}
        values |= {"leak_p": _chance(counts[CLOSED], counts[DARK])}
        se |= {"dark_hz": dark_se, "leak_hz": sqrt(closed_se**2 + dark_se**2)}
    return values, se


def _apart(values: Figures, shutter: bool) -> str:
    if not shutter:
        return " (dark and light together: the rig has no shutter)"
    seen = "no more" if values["leak_p"] is None or values["leak_p"] > ONE_IN_TWENTY else "more"
    return f", {values['dark_hz']:.4g} with the beam shut, so {seen} than dark"


def _lit(room: Mapping[str, FloatArray], values: Figures, se: Figures) -> str:
    """Add what the light of the room adds to values and errors, and return it in words."""
    night, lit = room[NIGHT], room[LIT]
    if not len(night) or not len(lit):
        return ""
    (night_hz, night_se), (lit_hz, lit_se) = _rate(night), _rate(lit)
    adds_hz, adds_se = lit_hz - night_hz, sqrt(night_se**2 + lit_se**2)
    chance = _chance(lit, night)
    values["room_hz"], se["room_hz"], values["room_p"] = adds_hz, adds_se, chance
    seen = "leave it off at night" if chance <= ONE_IN_TWENTY else "which is not seen"
    return f"; the room's light adds {adds_hz:.3g} +- {adds_se:.2g}, {seen}"


def _chance(more: FloatArray, less: FloatArray) -> float:
    """Return how probable it is that the first counts more than the second by chance alone."""
    (counts, live_s), (dark, dark_s) = more.sum(axis=0), less.sum(axis=0)
    return chance_of_more(float(counts), float(live_s), float(dark), float(dark_s))


def _counts(taken: Sequence[Taken], role: str) -> FloatArray:
    """Return counts and live time of the visits of a role, shape (N, 2)."""
    rows = [(reading.values[0], reading.live_s) for ask, reading in taken if ask.role == role]
    return np.array(rows, float).reshape(-1, 2)


def _rate(counts: FloatArray) -> tuple[float, float]:
    total, live_s = counts.sum(axis=0)
    return float(total / live_s), float(sqrt(max(total, 1.0)) / live_s)


def _even(tables: Sequence[FloatArray]) -> tuple[float, int]:
    """Return chi2 and degrees of freedom of tables of counts, each against a rate of its own."""
    found = [_against_one_rate(table) for table in tables]
    return sum(chi2 for chi2, _ in found), sum(dof for _, dof in found)


def _against_one_rate(counts: FloatArray) -> tuple[float, int]:
    expected = counts[:, 1] * counts[:, 0].sum() / counts[:, 1].sum()
    if not expected.min() > 0:
        return 0.0, 0
    return float(np.sum((counts[:, 0] - expected) ** 2 / expected)), len(counts) - 1


def _panel(title: str, taken: Sequence[Taken], counts: dict[str, FloatArray]) -> Panel:
    curves = []
    for role, table in counts.items():
        if not len(table):
            continue
        at = np.array([n for n, (ask, _) in enumerate(taken) if ask.role == role], float)
        rate = table[:, 0] / table[:, 1]
        bars = np.sqrt(np.maximum(table[:, 0], 1.0)) / table[:, 1]
        curves.append(Curve(at, rate, role, bars))
        curves.append(level(at, _rate(table)[0], f"{role}, mean"))
    return Panel(title, "visit", "counts a second", tuple(curves))


TASK = Task(
    name="dark",
    purpose="What the detector counts with the beam off, and what passes the mask with every slit shut.",
    days=1,
    holds_for=("chip", "devices"),
    asks=once(_visits),
    fit=_fit,
)
