"""Decide: order, dwell, nesting and measures against ripples, and the sentences that say which and why."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from math import factorial

from daq import openings
from daq.errors import DescriptionError
from daq.itinerary.choice import best_dwell_s, dwell_range_s, pair_cost, pair_times, searched_word
from daq.itinerary.design import Design
from daq.itinerary.dwell import STEP_S
from daq.itinerary.known import Known
from daq.itinerary.pilot import HOUR_S
from daq.itinerary.resonance import Rhythm, free, harmonic, in_step

MIRRORED = ("zigzag", "searched")  # orders in which a pair is its own mirror image
SEARCHED_AT = (1.0, 1.6, 2.5)  # times the best dwell along the mask: good words often like a longer one
MANY_NEAR = 40  # dwells are tried on either side of one that keeps step with a line
MANY_TOGETHER = 8  # groups of neighbouring positions are tried up to here, and the whole lap


@dataclass(frozen=True, slots=True)
class Decision:
    """A design, whether pairs begin after a random pause, and why, as sentences."""

    design: Design
    pauses: bool
    notes: tuple[str, ...]


def decide(known: Known, slots: Sequence[int], seed: int) -> Decision:
    """Return the design that the settings and the source ask for.

    Parameters
    ----------
    slots
        The openings of a forward stand (indices), each at least once: what a search begins with.
    seed
        Of the search.

    Raises
    ------
    DescriptionError
        When no dwell keeps the stand out of step with the lines that are known.
    """
    start = Design(tuple(slots), 1, known.settings.dwell_s or 1.0)
    design, notes = _nested(known, start, seed)
    design, pauses, measures = _kept_out_of_step(known, design)
    return Decision(design, pauses, (*notes, *measures, *_rig_notes(known, design)))


def rhythm(known: Known, design: Design) -> Rhythm:
    """Return the beat of a design."""
    *_, pair_s = pair_times(known, design)
    groups = -(-known.places_mm.size // design.together)
    return Rhythm(pair_s / (2 * groups), pair_s, max(1, known.settings.laps // 2))


def _nested(known: Known, start: Design, seed: int) -> tuple[Design, tuple[str, ...]]:
    """Return the best design over the numbers of positions swept together, with reasons."""
    positions = known.places_mm.size
    if known.settings.together:
        design = replace(start, together=min(known.settings.together, positions))
        return _chosen(known, design, seed)
    tries = sorted({*range(1, min(MANY_TOGETHER, positions) + 1), positions})
    found = [_chosen(known, replace(start, together=many), seed) for many in tries]
    costs = [pair_cost(known, design).time_variance for design, _ in found]
    at = costs.index(min(costs))
    rest = ", ".join(
        f"{many}: {100 * (cost / costs[at] - 1):.1f} %"
        for many, cost in zip(tries, costs, strict=True)
        if many != tries[at]
    )
    why = f"Positions swept together: {tries[at]}, the least time x variance (others cost more by {rest})."
    return found[at][0], (why, *found[at][1])


def _chosen(known: Known, design: Design, seed: int) -> tuple[Design, tuple[str, ...]]:
    """Return a design with the order and the dwell that are left to the planner, with reasons."""
    searched, free_dwell = known.settings.order == "searched", known.settings.dwell_s is None
    if free_dwell:
        design = replace(design, dwell_s=best_dwell_s(known, design))
    along, why = design, ""
    for longer in (SEARCHED_AT if free_dwell else (1.0,)) if searched else ():
        tried = replace(along, dwell_s=round(longer * along.dwell_s, 1) if free_dwell else along.dwell_s)
        word = searched_word(known, tried, seed)
        found = replace(tried, slots=word.slots)
        if free_dwell:
            found = replace(found, dwell_s=best_dwell_s(known, found))
        if pair_cost(known, found).time_variance < pair_cost(known, design).time_variance:
            design, why = found, _how(known, word.exhaustive, word.evaluations, len(word.slots))
    notes = _order_note(known, along, design, why) if searched else ()
    return design, (*notes, *(_dwell_note(known, design) if free_dwell else ()))


def _how(known: Known, exhaustive: bool, evaluations: int, visits: int) -> str:
    many = len(known.openings)
    orders = f"all {factorial(many)} orders" if visits == many else "all words"
    return f"{orders if exhaustive else 'annealed exchanges'}, {evaluations} steps weighed"


def _order_note(known: Known, along: Design, design: Design, why: str) -> tuple[str, ...]:
    if not why:
        return ("Order searched: none is better than along the mask.",)
    names = " ".join(openings.name(int(known.openings[opening])) for opening in design.word)
    gain = 1 - pair_cost(known, design).time_variance / pair_cost(known, along).time_variance
    return (f"Order {names} ({why}): {100 * gain:.1f} % less time than along the mask.",)


def _dwell_note(known: Known, design: Design) -> tuple[str, ...]:
    low_s, high_s = dwell_range_s(known, design, 0.05)
    return (
        f"Dwell {design.dwell_s:g} s, the least time x variance at the expected drift; "
        f"{low_s:g} to {high_s:g} s cost less than 5 % more.",
    )


def _kept_out_of_step(known: Known, design: Design) -> tuple[Design, bool, tuple[str, ...]]:
    """Return a design whose stand and pairs do not beat with a known line, whether it pauses, and why."""
    if not known.ripples or known.settings.order not in MIRRORED:
        return design, False, ()
    tried = []
    for near in _nearby(known, design):
        beat = rhythm(known, near)
        if free(beat, known.ripples):
            return near, False, tuple(_measure_notes(known, design, near))
        tried.append((near, beat))
    for near, beat in tried:
        if all(in_step(beat, ripple) is None for ripple in known.ripples):
            return near, True, (*_measure_notes(known, design, near), *_pause_notes(known, beat))
    raise DescriptionError(
        (
            f"itinerary.dwell_s: no dwell from {tried[-1][0].dwell_s:g} s on keeps a stand 5 % off every "
            "line of [expect] and [pilot]. Give another dwell, or take away lines that do not matter.",
        )
    )


def _nearby(known: Known, design: Design) -> Iterator[Design]:
    """Yield the design with its own dwell, then with some others ever further off, up to a third."""
    yield design
    step_s = STEP_S * max(1, round(design.dwell_s / STEP_S / 3 / MANY_NEAR))
    for steps in range(1, max(5, round(design.dwell_s / step_s / 3)) + 1):
        for dwell_s in (design.dwell_s + steps * step_s, design.dwell_s - steps * step_s):
            if dwell_s >= max(known.shortest_gate_s, STEP_S) - 1e-9:
                yield replace(design, dwell_s=round(dwell_s, 9))


def _measure_notes(known: Known, wished: Design, kept: Design) -> Iterator[str]:
    beat, now = rhythm(known, wished), rhythm(known, kept)
    for ripple in known.ripples:
        if kept != wished and in_step(beat, ripple) is not None:
            yield (
                f"Dwell {kept.dwell_s:g} s instead of {wished.dwell_s:g} s: a stand of {beat.stand_s:.1f} s "
                f"is within 5 % of the line of {ripple.period_s:g} s or its half, which would look like "
                f"interference; it now takes {now.stand_s:.1f} s."
            )
        elif kept != wished and (harmonic(beat, ripple) or 1) % 2 == 0:
            yield (
                f"Dwell {kept.dwell_s:g} s instead of {wished.dwell_s:g} s: the line of "
                f"{ripple.period_s:g} s fits {harmonic(beat, ripple)} times into a pair of "
                f"{beat.pair_s:.0f} s, and neither mirror nor coin would average it; "
                f"a pair now takes {now.pair_s:.0f} s."
            )
        if (harmonic(now, ripple) or 0) % 2:
            yield (
                f"The line of {ripple.period_s:g} s fits {harmonic(now, ripple)} times into a pair of "
                f"{now.pair_s:.0f} s: the coin of each pair turns it into scatter that the error bar sees."
            )


def _pause_notes(known: Known, beat: Rhythm) -> Iterator[str]:
    for ripple in known.ripples:
        if (harmonic(beat, ripple) or 1) % 2 == 0:
            yield (
                f"A random pause of up to {beat.pair_s / 4:.0f} s before each pair: the line of "
                f"{ripple.period_s:g} s fits {harmonic(beat, ripple)} times into a pair of "
                f"{beat.pair_s:.0f} s, and no dwell nearby avoids all known lines."
            )


def _rig_notes(known: Known, design: Design) -> Iterator[str]:
    settings = known.settings
    groups = -(-known.places_mm.size // design.together)
    if settings.fly_back and groups % 2 == 0 and settings.order in MIRRORED:
        yield (
            "Laps fly back and their number of stands is even: the second lap of each pair begins with a "
            "turned stand, so that every opening is shown as often forward as backward at every position."
        )
    if settings.order not in MIRRORED:
        yield f"Order {settings.order!r}: a linear drift of the source does not cancel."
    steps = design.dwell_s / STEP_S
    if abs(steps - round(steps)) > 1e-6:
        yield (
            f"Dwell {design.dwell_s:g} s is no whole multiple of {STEP_S:g} s: ripple of the mains does not "
            "average out within a gate."
        )
    if known.wander.walk_per_s and known.settings.dwell_s is None:
        walk = 100 * (known.wander.walk_per_s * HOUR_S) ** 0.5
        yield f"Counted on: a random walk of {walk:.2g} % per square root of an hour."
