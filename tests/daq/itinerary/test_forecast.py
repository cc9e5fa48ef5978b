import re

import numpy as np
import pytest

from daq.itinerary import compose, forecast
from daq.itinerary.advice import orders_compared, remedies, verdict
from daq.itinerary.forecast import mean_level
from tests.daq.itinerary.rigs import without
from tests.examples import lantern, lantern_rig

STEADY = {"expect__level_by_hour": [1.0]}


def forecast_of(**changes):
    measurement = lantern(**changes)
    return forecast(compose(measurement, lantern_rig()), measurement)


def test_the_forecast_of_the_reference_night():
    expected = forecast_of(**STEADY)

    assert (expected.visits, expected.laps, expected.pairs) == (12464, 38, 19)
    assert expected.duty == pytest.approx(expected.live_s / expected.total_s)
    assert expected.kappa_counting_se < expected.kappa_se < 1e-4
    assert expected.goal_s is not None
    assert expected.goal_s < expected.total_s


def test_q_is_time_over_the_ideal_time_for_the_same_error_bar():
    expected = forecast_of(**STEADY)

    moves = expected.total_s / expected.live_s
    noise = (expected.kappa_se / expected.kappa_counting_se) ** 2

    assert expected.q == pytest.approx(moves * noise)


def test_the_error_bar_shrinks_with_the_root_of_time_to_the_planned_end():
    expected = forecast_of()
    hours, se = np.array(expected.hours), np.array(expected.se)

    assert hours[-1] == pytest.approx(expected.total_s / 3600)
    assert se[-1] == pytest.approx(expected.kappa_se)
    assert se * np.sqrt(hours) == pytest.approx(expected.kappa_se * np.sqrt(hours[-1]))


def test_the_goal_is_met_at_the_end_of_the_first_pair_that_is_good_enough():
    expected = forecast_of(**STEADY)
    shift = expected.budget["dead time"]

    met = [
        hour
        for hour, se in zip(expected.hours, expected.se, strict=True)
        if se**2 + shift**2 <= expected.goal_se**2
    ]

    assert expected.goal_s == pytest.approx(3600 * met[0])


def test_a_source_that_falls_brings_fewer_counts():
    steady = forecast_of(**STEADY)
    falling = forecast_of(expect__level_by_hour=[1.0, 0.9, 0.8])

    level = mean_level((1.0, 0.9, 0.8), steady.total_s)

    assert falling.kappa_counting_se == pytest.approx(steady.kappa_counting_se / level**0.5)
    assert level == pytest.approx(
        (0.95 + 0.85 + 0.8 * (steady.total_s / 3600 - 2)) / steady.total_s * 3600, rel=1e-3
    )


def test_a_trend_shifts_a_blocked_night_and_leaves_a_zig_zag_night_alone():
    five_percent = [1.0 - 0.005 * hour for hour in range(11)]
    blocked = forecast_of(itinerary__order="blocked", expect__level_by_hour=five_percent)
    zigzag = forecast_of(expect__level_by_hour=five_percent)

    assert blocked.budget["trend"] > 20 * blocked.kappa_counting_se
    assert zigzag.budget["trend"] < 1e-2 * zigzag.kappa_counting_se


def test_background_is_a_part_of_counting():
    bare = forecast_of(expect__background_rate_hz=0.0)
    dark = forecast_of(expect__background_rate_hz=8e3)

    assert bare.budget["background"] == 0
    assert dark.budget["background"] < dark.budget["counting"]
    rest = dark.budget["counting"] ** 2 - dark.budget["background"] ** 2
    assert rest**0.5 == pytest.approx(bare.budget["counting"], rel=0.1)


def test_an_uncertain_dead_time_shifts_kappa_by_its_slope():
    centre = {"start_mm": 0.0, "stop_mm": 0.0, "number": 1}

    expected = forecast_of(positions=centre, estimate__dead_time_s=0.0, estimate__dead_time_u_s=3e-9)

    # first order: epsilon goes by -sum_S s_S n_S^2 times the dead time; without background -(2/3) n_ABC tau
    rates_hz = 40e3 * np.array([0, 1, 1, 1, 4, 4, 4, 9]) + 800
    signs = np.array([-1, 1, 1, 1, -1, -1, -1, 1])
    assert expected.budget["dead time"] == pytest.approx(
        3e-9 * abs(signs @ rates_hz**2) / (6 * 40e3), rel=1e-4
    )
    assert expected.budget["dead time"] == pytest.approx(2 / 3 * 360e3 * 3e-9, rel=0.05)


def test_weights_that_are_blind_to_the_dead_time_leave_no_shift():
    assert forecast_of(estimate__dead_time_u_s=3e-9).budget["dead time"] < 1e-9


def test_a_monitor_pays_when_its_noise_is_less_than_the_drift():
    wishes = {"estimate__goal_se": 2e-5, "expect__drift_per_sqrt_hour": 0.1}

    bright = lantern(**wishes, expect__monitor_rate_hz=1e8)
    dim = lantern(**wishes, expect__monitor_rate_hz=1e3)

    told = [" ".join(_told(measurement)) for measurement in (bright, dim)]
    assert "Normalised to the monitor" in told[0]
    assert "Normalised to the monitor" not in told[1]


def _told(measurement):
    rig = lantern_rig()
    itinerary = compose(measurement, rig)
    return remedies(measurement, rig, itinerary, forecast(itinerary, measurement))


def test_a_fano_factor_widens_counting_by_its_root():
    plain, wide = forecast_of(), forecast_of(estimate__fano=1.21)

    assert wide.kappa_counting_se == pytest.approx(1.1 * plain.kappa_counting_se)


def test_an_odd_lap_adds_time_and_nothing_else():
    even, odd = forecast_of(itinerary__laps=4, **STEADY), forecast_of(itinerary__laps=5, **STEADY)

    assert odd.pairs == even.pairs
    assert odd.kappa_counting_se == pytest.approx(even.kappa_counting_se)
    assert odd.total_s > even.total_s


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({}, r"met after \d+\.\d h of \d+\.\d h; kappa will come out at ± \d\.\d\de-05\."),
        ({"estimate__goal_se": 5e-5}, r"not met in 9\.9 h, where kappa .* it takes \d+\.\d h\."),
        ({"itinerary__order": "blocked", "expect__level_by_hour": [1.0, 0.5]}, "out of reach: what no time"),
    ],
)
def test_the_verdict_says_when_the_goal_is_met(changes, words):
    assert re.search(words, verdict(forecast_of(**STEADY | changes)))


def test_without_a_goal_the_verdict_gives_the_error_bar():
    measurement = without("estimate", "goal_se")

    assert "after 9.9 h" in verdict(forecast(compose(measurement, lantern_rig()), measurement))
    assert _told(measurement) == ()


def test_remedies_come_with_figures_that_hold():
    measurement = lantern(**STEADY, estimate__goal_se=7e-5)

    first = _told(measurement)[0]

    assert first.startswith("With ")
    best = lantern(**STEADY, estimate__goal_se=7e-5, itinerary__dwell="best")
    goal_s = forecast(compose(best, lantern_rig()), best).goal_s
    assert goal_s is not None
    hours = goal_s / 3600
    assert f'With dwell = "best" it takes {hours:.1f} h.' in _told(measurement)


def test_a_source_as_bright_as_advised_meets_the_goal():
    measurement = lantern(**STEADY, estimate__goal_se=7e-5)
    (bright,) = (text for text in _told(measurement) if "times as bright" in text)

    factor = float(bright.split("a source ")[1].split(" times")[0])
    wishes = {"single_slit_rate_hz": 40e3 * factor * 1.05, "background_rate_hz": 800 * factor * 1.05}
    brighter = lantern(
        **STEADY, estimate__goal_se=7e-5, **{f"expect__{key}": value for key, value in wishes.items()}
    )

    expected = forecast(compose(brighter, lantern_rig()), brighter)
    assert expected.goal_s is not None
    assert expected.goal_s <= expected.total_s


def test_where_drift_alone_is_too_much_no_brighter_source_is_advised():
    measurement = lantern(estimate__goal_se=2e-5, expect__drift_per_sqrt_hour=0.1)

    assert any("A brighter source would not do" in text for text in _told(measurement))


def test_orders_are_compared_at_the_same_dwell():
    measurement = lantern(itinerary__laps=4)
    compared = orders_compared(measurement, lantern_rig(), compose(measurement, lantern_rig()))

    assert list(compared) == ["zigzag", "searched", "cyclic", "random", "blocked"]
    assert len({one.live_s for one in compared.values()}) == 1
    assert compared["searched"].q <= compared["zigzag"].q < compared["cyclic"].q < compared["random"].q
    assert compared["blocked"].q > 100
