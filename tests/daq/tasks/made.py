"""Readings as a task would get them, drawn from rates that a test gives."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import numpy as np

from daq.description import Measurement, Rig
from daq.estimate import seen_rate_hz
from daq.records import UNPLANNED, Reading
from daq.tasks.contract import Ask, Setting, Taken
from daq.tasks.yardstick import yardstick
from tests.examples import lantern, lantern_rig

GAP_S = 1.0


def setting(
    measurement: Measurement | None = None,
    rig: Rig | None = None,
    shutter: bool = False,
    **earlier: dict[str, object],
) -> Setting:
    """Return what a task knows on the Lantern bench."""
    measurement, rig = measurement or lantern(), rig or lantern_rig()
    return Setting(measurement, rig, yardstick(measurement, rig), shutter, earlier)


def drawn(
    asks: Sequence[Ask], rate_hz: Callable[[Ask], float], random: np.random.Generator, began_s: float = 0.0
) -> list[Taken]:
    """Return visits with Poisson counts of a rate, one after another with a gap between them."""
    found, now_s = [], began_s
    for ask in asks:
        counts = int(random.poisson(rate_hz(ask) * ask.dwell_s))
        found.append((ask, reading(ask, (counts,), now_s)))
        now_s += ask.dwell_s + GAP_S
    return found


def reading(ask: Ask, values: tuple[float, ...], opened_s: float = 0.0, **more: object) -> Reading:
    """Return one reading of a visit that was asked for."""
    open_ns = round(opened_s * 1e9)
    plain = {
        "visit": UNPLANNED,
        "attempt": 1,
        "opening": ask.opening,
        "position_mm": ask.position_mm,
        "dwell_s": ask.dwell_s,
        "gate_open_ns": open_ns,
        "gate_close_ns": open_ns + round(ask.dwell_s * 1e9),
        "utc_ns": open_ns,
        "live_s": ask.dwell_s,
        "values": values,
    }
    return Reading(**plain | more)  # type: ignore[arg-type]


def crossing_rates(
    alone_hz: float = 1e6, background_hz: float = 800.0, scale: float = 0.0, far: float = 0.8
) -> np.ndarray:
    """Return rates of none, A, B, AB at the four crossings (4, 4); a scale off by some radians a quarter."""
    rows = []
    for light, turns in ((alone_hz, 1), (alone_hz, 1), (far * alone_hz, 3), (far * alone_hz, 3)):
        cross = 2 * light * np.cos(turns * (np.pi / 2 + scale))
        rows.append([0.0, light, light, 2 * light + cross])
    return np.array(rows) + background_hz


def cycles_of(
    rates_hz: np.ndarray, number: int, live_s: float, kind: str, random: np.random.Generator
) -> np.ndarray:
    """Return recorded rates of cycles (C, 4, 4) behind a dead time of 40 ns, counted at random [1/s].

    The number of counts behind a dead time varies less than by itself, by (1 + x)^-2 or 1 - 2 x exp(-x),
    x = rate times dead time (renewal theory, from memory).
    """
    seen, x = seen_rate_hz(rates_hz, 40e-9, kind), rates_hz * 40e-9
    narrowed = (1 + x) ** -2 if kind == "non-paralysable" else 1 - 2 * x * np.exp(-x)
    noise = random.standard_normal((number, *seen.shape))
    return np.asarray(seen + noise * np.sqrt(seen * narrowed / live_s))


def gate_ticks(
    rate_hz: float, number: int, tau_s: float, tick_s: float, random: np.random.Generator
) -> np.ndarray:
    """Return the times of counts of a non-paralysable counter [ticks]: an arrival after each dead time."""
    times_s = np.cumsum(tau_s + random.exponential(1 / rate_hz, number + 1))
    return np.floor(times_s / tick_s).astype(np.int64)


def sums_sd_s(alone_hz: float, live_s: float) -> float:
    """Return the standard error of a dead time by sums of two equal slits at four crossings alike [s].

    Of one crossing it is sqrt((a + b + ab)/T)/(2 a b) = 1/(n^1.5 sqrt T), T the live time of each opening
    (first order in counts and dead time, derived). Weights of 1, 1, 1/3, 1/3 leave (2 + 2/9)/(8/3)^2 of its
    square.
    """
    return float(np.sqrt((2 + 2 / 9) / (8 / 3) ** 2) / (alone_hz**1.5 * np.sqrt(live_s)))


PERIODS_MM = {"AB": 5.32, "BC": 5.32, "AC": 2.66}
MIDDLE_MM, LOBE_MM, RANGE_MM = 0.11, 16.0, 25.6


def scan_mm() -> np.ndarray:
    """Return places of a scan with eight points a finest fringe [mm]."""
    return np.linspace(-RANGE_MM / 2, RANGE_MM / 2, 79)


def pair_counts(
    visibility: float,
    alone: float,
    lobe_mm: float,
    none: float = 0.0,
    place_mm: np.ndarray | None = None,
    lit: Mapping[str, float] | None = None,
    periods_mm: Mapping[str, float] = PERIODS_MM,
) -> dict[str, np.ndarray]:
    """Return what is counted on average at every place of a scan, of none, slits and pairs."""
    place_mm = scan_mm() if place_mm is None else place_mm
    amplitude = np.sqrt(alone) * np.sinc(place_mm / lobe_mm)
    each = {slit: amplitude * np.sqrt((lit or {}).get(slit, 1.0)) for slit in "ABC"}
    found = {"none": np.full(len(place_mm), none)}
    found |= {slit: one**2 + none for slit, one in each.items()}
    for pair, period_mm in periods_mm.items():
        a, b = (each[slit] for slit in pair)
        wave = np.cos(2 * np.pi * (place_mm - MIDDLE_MM) / period_mm)
        found[pair] = none + a**2 + b**2 + 2 * visibility * a * b * wave
    return found


def fringe_sd_mm(pair: str, counts: Mapping[str, np.ndarray], visibility: float) -> tuple[float, float]:
    """Return the least standard errors of period and middle of a fringe of N counts in even light [mm].

    L/(2 pi sqrt(N (1 - sqrt(1 - V^2)))) for the middle, sqrt(12) L / range of that for the period: the Fisher
    information of n (1 + V cos) about its phase, integrated over whole fringes (derived).
    """
    period_mm, total = PERIODS_MM[pair], float(counts[pair[0]].sum() + counts[pair[1]].sum())
    middle = period_mm / (2 * np.pi * np.sqrt(total * (1 - np.sqrt(1 - visibility**2))))
    return float(np.sqrt(12) * period_mm / RANGE_MM * middle), float(middle)
