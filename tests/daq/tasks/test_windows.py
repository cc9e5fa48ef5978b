"""Windows: as exact as the counts allow, told apart either way round; what clipping takes."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import norm

from daq.errors import DaqError
from daq.tasks.windows import balance_mm, clipped, fitted, named, ramp_mm, seen_windows, together, window
from simulators.chip import Chip
from simulators.motion import Leg
from simulators.settings import ChipSettings
from tests.examples import lantern_rig

EDGE_MM, ERROR_MM = 0.1, 0.06
DRAWN_MM = {"A": 2.0, "AB": 4.0, "B": 6.0, "AC": 8.0, "ABC": 10.0, "BC": 12.0, "C": 14.0, "key": 18.4}


@pytest.mark.parametrize("plateau", [200, 2_000, 20_000])
def test_a_centre_is_as_exact_as_the_counts_allow_and_not_off(plateau: int) -> None:
    random, place_mm = np.random.default_rng(plateau), np.arange(-1.0, 1.0001, EDGE_MM)
    truth = np.array([0.02 * plateau, plateau, -0.5, 0.5, EDGE_MM])
    start = np.array([0.05 * plateau, 0.9 * plateau, -0.45, 0.55, 0.07])

    found = [
        fitted(place_mm, random.poisson(window(place_mm, truth)).astype(float), start) for _ in range(300)
    ]

    centre = np.array([one.centre_mm for one in found])
    bound = float(
        np.mean(
            [
                np.sqrt(np.array([0, 0, 0.5, 0.5, 0]) @ one.covariance @ np.array([0, 0, 0.5, 0.5, 0]))
                for one in found
            ]
        )
    )
    # the scatter of 300 is known to 4 %, their mean to 6 % of it
    assert centre.std(ddof=1) / bound < 1.10 + 2 * 0.041
    assert abs(centre.mean()) / bound < 0.1 + 2 * 0.058
    assert np.mean([one.chi2 / one.dof for one in found]) == pytest.approx(1.0, abs=0.05)


@pytest.mark.parametrize("plateau", [2_000, 20_000])
def test_the_error_of_a_centre_is_the_closed_form(plateau: int) -> None:
    place_mm, background = np.arange(-1.0, 1.0001, EDGE_MM), 0.02
    truth = np.array([background * plateau, plateau, -0.5, 0.5, EDGE_MM])

    found = fitted(place_mm, window(place_mm, truth), truth)

    # sd(c) = sqrt(s D / (2 N I)), I = integral of phi^2 / (Phi + b); 0.774 for b = 0.02, by quadrature here
    t = np.linspace(-8, 8, 4001)
    phi = np.exp(-(t**2) / 2) / np.sqrt(2 * np.pi)
    cumulated = np.cumsum(phi) * (t[1] - t[0])
    integral = float(np.trapezoid(phi**2 / (cumulated + background), t))
    assert integral == pytest.approx(0.774, abs=0.002)
    assert found.centre_se_mm == pytest.approx(
        np.sqrt(EDGE_MM * EDGE_MM / (2 * plateau * integral)), rel=0.03
    )


def jittered(random: np.random.Generator) -> np.ndarray:
    """Return window centres of the drawing as a coarse scan would see them, the chip off altogether."""
    centres = np.array(list(DRAWN_MM.values())) + random.uniform(-0.3, 0.3)
    return centres + random.normal(0, 0.05, len(centres))


def test_a_chip_is_recognised_a_hundred_times_of_a_hundred() -> None:
    random = np.random.default_rng(1)

    assert all(list(named(jittered(random), DRAWN_MM, ERROR_MM)) == list(DRAWN_MM) for _ in range(100))


def test_a_mirrored_chip_is_refused_a_hundred_times_of_a_hundred() -> None:
    random = np.random.default_rng(2)

    for _ in range(100):
        with pytest.raises(DaqError, match="in the wrong way"):
            named(np.sort(20.0 - jittered(random)), DRAWN_MM, ERROR_MM)


def test_a_missing_window_is_refused_a_hundred_times_of_a_hundred() -> None:
    random = np.random.default_rng(3)

    for one in range(100):
        seen = np.delete(jittered(random), one % len(DRAWN_MM))
        with pytest.raises(DaqError, match="7 windows were seen where the drawing has 8"):
            named(seen, DRAWN_MM, ERROR_MM)


def test_a_chip_that_looks_alike_both_ways_is_refused() -> None:
    even = {name: at for name, at in DRAWN_MM.items() if name != "key"}

    with pytest.raises(DaqError, match=r"both ways round.*key window"):
        named(np.array(list(even.values())), even, ERROR_MM)


def test_no_window_at_all_is_a_sentence() -> None:
    with pytest.raises(DaqError, match="no window was seen"):
        named(np.array([]), DRAWN_MM, ERROR_MM)


def test_another_chip_is_refused() -> None:
    with pytest.raises(DaqError, match=r"off the drawing by 0\.5"):
        named(np.array([2.0, 4.0, 6.0, 9.0, 10.0, 12.0, 14.0, 18.4]), DRAWN_MM, ERROR_MM)


def test_a_fit_without_edges_is_refused_with_a_sentence() -> None:
    place_mm = np.arange(-1.0, 1.0001, EDGE_MM)

    with pytest.raises(DaqError, match=r"does not converge.*nothing was moved further"):
        fitted(place_mm, np.full(len(place_mm), 700.0), np.array([10.0, 700.0, -0.5, 0.5, 0.1]))


def test_windows_are_seen_half_a_step_beyond_their_bright_points() -> None:
    place = np.arange(0.0, 6.0, 0.5)
    rate = np.where((place >= 1) & (place <= 2) | (place >= 4), 100.0, 1.0)

    assert seen_windows(place, rate, 50.0) == [(0.75, 2.25), (3.75, 5.75)]


@pytest.mark.parametrize("loss", [1e-5, 1e-4, 1e-3, 1e-2])
def test_what_clipping_takes_is_what_a_simulated_stage_loses_to_a_tenth(loss: float) -> None:
    """The study `tasks` has it to half a hundredth."""
    random, edge_mm, repeat = np.random.default_rng(4), 0.04, 0.02
    offset_mm = 0.6 - norm.isf(loss) * np.hypot(edge_mm, repeat)
    stands = offset_mm + repeat * random.standard_normal(400_000)
    lost = 1.0 - window(stands, np.array([0.0, 1.0, -0.6, 0.6, edge_mm]))

    said = clipped(offset_mm, 1.2, edge_mm, repeat)

    assert said == pytest.approx(loss, rel=1e-6)
    assert lost.std() / np.sqrt(len(lost)) < 0.025 * said
    assert lost.mean() == pytest.approx(said, rel=0.10)


@pytest.mark.parametrize("loss", [1e-5, 1e-4, 1e-3, 1e-2])
def test_what_clipping_takes_is_what_the_chip_of_the_bench_takes_to_a_tenth(loss: float) -> None:
    """The bench has windows of its own (simulators.chip), which share nothing with those that are fitted."""
    edge_mm, repeat, drawn_mm = 0.04, 0.01, 2.0
    chip = Chip(lantern_rig(), ChipSettings(window_mm=1.2, edge_mm=edge_mm, repeat_mm=repeat), seed=3)
    offset_mm = 0.6 - norm.isf(loss) * np.hypot(edge_mm, repeat)
    legs = [Leg(start_ns, start_ns + 1, 0.0, drawn_mm) for start_ns in range(20_000)]

    passed = [dict(chip.shares(drawn_mm + offset_mm + chip.off_mm(leg)))[1] for leg in legs]

    lost = 1.0 - np.array(passed)
    assert lost.std() / np.sqrt(len(lost)) < 0.025 * loss
    assert lost.mean() == pytest.approx(clipped(offset_mm, 1.2, edge_mm, repeat), rel=0.10)


def test_the_balance_of_two_flanks_says_how_far_a_window_is_off_and_how_well_that_is_known() -> None:
    random, ramp, plateau, off_mm = np.random.default_rng(5), ramp_mm(EDGE_MM), 50_000, 0.004
    truth = np.array([0.0, plateau, -0.5 + off_mm, 0.5 + off_mm, EDGE_MM])
    left, right = (random.poisson(window(np.array([at]), truth)[0], 2000) for at in (-0.5, 0.5))

    found = np.array([balance_mm(float(a), float(b), ramp) for a, b in zip(left, right, strict=True)])

    assert found[:, 0].mean() == pytest.approx(off_mm, rel=0.02)
    assert found[:, 0].std() == pytest.approx(found[:, 1].mean(), rel=4 / np.sqrt(2 * 2000))


def test_a_stage_that_scatters_is_seen_beside_counting_and_its_share_of_the_error_is_counted() -> None:
    random, repeat = np.random.default_rng(6), 0.004
    place_mm = np.arange(-1.0, 1.0001, EDGE_MM / 2)
    truth = np.array([400.0, 20_000, -0.5, 0.5, EDGE_MM])

    def one() -> tuple[np.ndarray, np.ndarray]:
        stands = place_mm + repeat * random.standard_normal(len(place_mm))
        return place_mm, random.poisson(window(stands, truth)).astype(float)

    found, scatter = together({str(n): one() for n in range(200)}, {str(n): truth for n in range(200)})

    assert scatter == pytest.approx(repeat, rel=0.1)
    centre = np.array([each.centre_mm for each in found.values()])
    said = np.mean([each.centre_se_mm for each in found.values()])
    assert centre.std(ddof=1) == pytest.approx(said, rel=4 / np.sqrt(2 * 200))
