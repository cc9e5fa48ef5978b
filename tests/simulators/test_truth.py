"""Truth: what a gate counts, from where the axes were and how strong the source was."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from simulators.motion import Track
from simulators.settings import read_settings
from simulators.truth import Truth
from tests.examples import lantern_rig

S = 1_000_000_000
STEADY: dict[str, Any] = {
    "bench__source__linear_per_hour": 0.0,
    "bench__source__random_walk_per_sqrt_hour": 0.0,
    "bench__dead_time_s": 0.0,
    "bench__chip": {},  # an opening is there within its tolerance, and dark beside it
}
ABC, A, NONE = 7, 1, 0


class Bench:
    """The truth of the Lantern bench, its mask showing ABC and its detector at 0 mm, on a steady source."""

    def __init__(self, seed: int = 1, **changes: Any) -> None:
        self.rig = lantern_rig(**{**STEADY, **changes})
        self.mask = Track(self.rig.mask_at_mm(ABC), 0.0, homed=True)
        self.detector = Track(0.0, -15.0, homed=True)
        tracks = {"mask": self.mask, "detector": self.detector}
        self.truth = Truth(self.rig, read_settings(self.rig), seed, tracks)

    def counts(self, gates: int, gate_s: float) -> list[int]:
        width_ns = round(gate_s * S)
        return [
            self.truth.counts("counter", 1000 * S + gate * width_ns, 1000 * S + (gate + 1) * width_ns)
            for gate in range(gates)
        ]


def within(counts: list[int], expected: float) -> bool:
    """Return whether a mean of Poisson counts lies within four standard errors of what is expected."""
    return abs(float(np.mean(counts)) - expected) < 4 * math.sqrt(expected / len(counts))


def test_slit_a_alone_has_its_rate_at_the_middle_of_its_own_pattern() -> None:
    bench = Bench()

    (rates,) = bench.truth.rates_hz([A, NONE], [-0.12])

    assert rates.tolist() == pytest.approx([40_000 + 750 + 50, 750 + 50])


def test_rates_come_position_by_opening() -> None:
    bench = Bench()

    rates = bench.truth.rates_hz(range(8), [-3.0, 0.0, 3.0])

    assert rates.shape == (3, 8)
    # three equal slits in phase: nine times one, but for the curvature of a field 1.2 m away
    assert rates[1, ABC] == pytest.approx(9 * 40_000 + 800, rel=0.01)


def test_the_signed_sum_of_the_true_rates_vanishes() -> None:
    signs = [1 if mask.bit_count() % 2 else -1 for mask in range(8)]

    rates = Bench().truth.rates_hz(range(8), np.linspace(-12.8, 12.8, 41).tolist())

    assert np.abs(rates @ signs).max() < 1e-9 * 40_000


def test_a_slit_cut_wider_for_one_opening_is_seen_in_that_opening_alone() -> None:
    cut = {"at_mm": 4.0, "cuts": {"A": {"centre_m": -120e-6, "width_m": 44e-6}}}
    bench = Bench(mask__openings__AB=cut)

    difference = bench.truth.rates_hz(range(8), [0.0]) - Bench().truth.rates_hz(range(8), [0.0])

    assert difference[0, 3] > 1000
    assert np.delete(difference[0], 3).tolist() == [0.0] * 7


def test_a_gate_counts_the_light_of_the_opening_and_the_place() -> None:
    bench = Bench()
    (expected_hz,) = bench.truth.rates_hz([ABC], [0.0])[0]

    assert within(bench.counts(100, 2.2), 2.2 * expected_hz)


@pytest.mark.parametrize(("off_mm", "shown"), [(0.0049, ABC), (-0.0049, ABC), (0.0051, None), (1.0, None)])
def test_an_opening_is_shown_within_the_tolerance_of_its_place(off_mm: float, shown: int | None) -> None:
    bench = Bench()

    assert bench.truth.shown(bench.rig.mask_at_mm(ABC) + off_mm) == shown


def test_between_two_openings_only_dark_counts_are_left() -> None:
    bench = Bench()
    bench.mask.go(0, bench.rig.mask_at_mm(ABC) + 1.0, 10.0)

    assert within(bench.counts(100, 2.2), 2.2 * 50)


def test_a_gate_over_the_start_of_a_mask_move_loses_what_it_is_blocked() -> None:
    bench = Bench()
    (lit_hz,) = bench.truth.rates_hz([ABC], [0.0])[0]
    bench.mask.go(1001 * S, bench.rig.mask_at_mm(ABC) + 1.0, 10.0)  # dark 0.5 ms after its start

    (counts,) = bench.counts(1, 2.0)

    assert abs(counts - (lit_hz + 50)) < 4 * np.sqrt(lit_hz) + 0.0017 * lit_hz  # cut into parts of 1.6 ms


def test_a_gate_over_a_detector_move_counts_the_mean_of_the_way() -> None:
    bench = Bench()
    bench.detector.go(1000 * S, 4.0, 2.0)
    middles_mm = 4.0 * (np.arange(4000) + 0.5) / 4000
    mean_hz = bench.truth.rates_hz([ABC], middles_mm.tolist()).mean()

    (counts,) = bench.counts(1, 2.0)

    # four standard errors, and 64 midpoints against 4000: h^2/24 (last slope - first slope) / 4 mm with
    # h = 62.5 um and slopes below 1e6 per s and mm is 80 per s, less than 1e-3 of the mean
    assert abs(counts / (2 * mean_hz) - 1) < 4 / np.sqrt(2 * mean_hz) + 1e-3


def test_the_source_drifts_and_the_dark_counts_do_not() -> None:
    bench = Bench(bench__source__linear_per_hour=-3.6)  # dry after 1000 s

    assert within(bench.counts(100, 2.2), 2.2 * 50)


def test_light_and_background_scale_with_the_source() -> None:
    bench = Bench(bench__source__linear_per_hour=-1.8)  # a half is left at 1000 s
    (steady_hz,) = Bench().truth.rates_hz([ABC], [0.0])[0]

    assert within(bench.counts(100, 0.01), 0.01 * (50 + (steady_hz - 50) * (1 - 0.5 * 1000.5 / 1000)))


def test_a_count_does_not_depend_on_when_it_is_asked_for_nor_on_later_moves() -> None:
    bench = Bench(bench__source__random_walk_per_sqrt_hour=0.01)
    first = bench.counts(3, 2.2)
    bench.mask.go(2000 * S, 2.0, 10.0)

    again = [bench.counts(3, 2.2)[gate] for gate in (2, 0, 1)]

    assert [again[1], again[2], again[0]] == first


def test_seed_device_and_start_of_the_gate_each_draw_anew() -> None:
    bench = Bench()
    gates = (1000 * S, 1002 * S)

    drawn = {
        bench.truth.counts("counter", *gates),
        bench.truth.counts("monitor", *gates),
        bench.truth.counts("counter", gates[0] + 1, gates[1] + 1),
        Bench(seed=2).truth.counts("counter", *gates),
    }

    assert len(drawn) == 4


def test_dead_time_takes_its_share() -> None:
    bench = Bench(bench__dead_time_s=1e-6)
    (true_hz,) = bench.truth.rates_hz([ABC], [0.0])[0]

    # narrower than Poisson, so four of its standard errors are more than enough
    assert within(bench.counts(100, 2.2), 2.2 * true_hz / (1 + true_hz * 1e-6))


def _channels(*sees: dict[str, Any]) -> dict[str, Any]:
    return {"bench__channels": list(sees)}


def _mean(bench: Bench, channel: int, gates: int = 50) -> list[int]:
    return [bench.truth.counts("counter", (1000 + n) * S, (1001 + n) * S, channel) for n in range(gates)]


def test_a_monitor_sees_the_source_and_neither_mask_nor_shutter() -> None:
    bench = Bench(**_channels({}, {"sees": "monitor", "rate_hz": 1e5}))
    bench.mask.go(0, 3.0, 10.0)  # between two openings
    bench.truth.behind(np.zeros_like)

    assert within(_mean(bench, 1), 1e5)
    assert within(_mean(bench, 0), 50.0)


def test_a_monitor_drifts_with_the_source() -> None:
    drifting: dict[str, Any] = {"bench__source__linear_per_hour": -0.36}
    bench = Bench(**drifting, **_channels({}, {"sees": "monitor", "rate_hz": 1e5}))

    assert within(_mean(bench, 1), 1e5 * (1 - 0.36 * 1025 / 3600))


def test_coincidences_are_twins_and_chance_pairs() -> None:
    singles = ({"sees": "detector"}, {"sees": "monitor", "rate_hz": 1e5})
    bench = Bench(**_channels({"sees": "coincidence", "share": 0.1, "window_s": 1e-6}, *singles))
    ((twins_hz,),) = bench.truth.rates_hz([ABC], [0.0]).tolist()
    ((signal_hz,),) = Bench().truth.rates_hz([ABC], [0.0]).tolist()

    assert twins_hz == pytest.approx(0.1 * (signal_hz - 50))
    assert within(_mean(bench, 0), twins_hz + 1e-6 * signal_hz * 1e5)


def test_channels_draw_their_own_counts() -> None:
    bench = Bench(**_channels({}, {}))

    assert _mean(bench, 0) != _mean(bench, 1)
