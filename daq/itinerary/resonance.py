"""Resonance: periodic ripples that fit the rhythm of a plan, and would look like interference."""

from __future__ import annotations

from dataclasses import dataclass

from daq.itinerary.pilot import Ripple

NEAR = 0.05  # a stand this near to a line, or to its half, is in step with it


@dataclass(frozen=True, slots=True)
class Rhythm:
    """The beat of a plan: one stand, one pair [s], and how many pairs."""

    stand_s: float
    pair_s: float
    pairs: int


def in_step(rhythm: Rhythm, ripple: Ripple) -> float | None:
    """Return the period that a stand is within 5 % of: that of the line or half of it; None if neither."""
    for period_s in (ripple.period_s, ripple.period_s / 2):
        if abs(rhythm.stand_s - period_s) < NEAR * period_s:
            return period_s
    return None


def harmonic(rhythm: Rhythm, ripple: Ripple) -> int | None:
    """Return which harmonic of the pair a line cannot be told from during the run, an even one first.

    None if there is none.

    Notes
    -----
    A line at frequency f is within one resolution of harmonic m of the pair when |f - m/T_pair| is less than
    1/T_run and the uncertainty of f. Odd harmonics are cured by the coin of each pair: it turns their sign.
    """
    cycles = rhythm.pair_s / ripple.period_s
    near = 1 / rhythm.pairs + cycles * ripple.period_u_s / ripple.period_s
    for number in (2 * round(cycles / 2), round(cycles)):
        if number and abs(cycles - number) < near:
            return number
    return None


def free(rhythm: Rhythm, ripples: tuple[Ripple, ...]) -> bool:
    """Return whether no line is in step with a stand or near an even harmonic of the pair."""
    return not any(
        in_step(rhythm, ripple) is not None or (harmonic(rhythm, ripple) or 1) % 2 == 0 for ripple in ripples
    )
