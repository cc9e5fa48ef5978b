import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from daq.itinerary import compose, forecast
from daq.itinerary.compose import pattern_of_itinerary
from daq.itinerary.dwell import opening_shares, position_shares, visit_dwell_s
from tests.daq.itinerary.rigs import without_dwell
from tests.examples import lantern, lantern_rig

FLOATS = st.floats(1.0, 1e6)


@given(rates=st.lists(FLOATS, min_size=4, max_size=8), floor=st.floats(0.01, 1.0))
def test_shares_add_up_to_one_and_none_is_below_the_floor(rates, floor):
    shares = opening_shares(np.array([rates]), "best", floor)

    assert shares.sum() == pytest.approx(1.0)
    assert shares.min() >= floor / len(rates) * (1 - 1e-9)


def test_above_the_floor_shares_go_as_the_square_root_of_the_rate():
    shares = opening_shares(np.array([[1.0, 100.0, 400.0, 900.0]]), "best", 0.1)

    # roots 1 10 20 30: the first would get 1/61 < 0.1/4, so it gets the floor and the others what is left
    assert shares[0] == pytest.approx([0.025, 0.1625, 0.325, 0.4875])


@pytest.mark.parametrize("kind", ["uniform", "worth"])
def test_positions_get_time_by_worth_or_all_the_same(kind):
    worth = np.array([1.0, 3.0, 0.0])

    shares = position_shares(worth, kind, 0.3)

    expected = {"uniform": [1 / 3, 1 / 3, 1 / 3], "worth": [0.225, 0.675, 0.1]}
    assert shares == pytest.approx(expected[kind])


@given(
    total=st.lists(st.floats(0.5, 30.0), min_size=3, max_size=3),
    parts=st.permutations([0, 0, 1, 1, 2]),
)
def test_dwell_in_steps_keeps_the_length_of_a_stand_within_half_a_step(total, parts):
    share = [1 / parts.count(opening) for opening in parts]

    dwell_s = visit_dwell_s(np.array([total]), parts, share, 0.0)

    assert np.round(dwell_s * 10, 6) == pytest.approx(np.round(dwell_s * 10))
    assert dwell_s.sum() == pytest.approx(sum(total), abs=0.0501)
    assert dwell_s.min() >= 0.1


def test_no_dwell_is_shorter_than_the_counter_can_gate():
    assert visit_dwell_s(np.array([[0.2, 9.0]]), (0, 1), (1.0, 1.0), 0.55).min() == 0.6


@pytest.mark.parametrize("dwell", ["equal", "best"])
@pytest.mark.parametrize("time", ["uniform", "worth"])
def test_chosen_dwell_comes_in_steps_of_a_tenth_of_a_second(dwell, time):
    itinerary = compose(without_dwell(itinerary__dwell=dwell, positions__time=time), lantern_rig())

    assert np.round(itinerary.dwell_s * 10) == pytest.approx(itinerary.dwell_s * 10, abs=1e-9)


def test_best_dwell_has_the_least_time_variance_of_all_steps():
    measurement = without_dwell(expect__drift_per_sqrt_hour=0.03, itinerary__laps=2)
    chosen_s = float(compose(measurement, lantern_rig()).dwell_s[0])

    q = {}
    for dwell_s in np.arange(1, 101) / 10:
        given_dwell = lantern(
            expect__drift_per_sqrt_hour=0.03, itinerary__laps=2, itinerary__dwell_s=float(dwell_s)
        )
        q[float(dwell_s)] = forecast(compose(given_dwell, lantern_rig()), given_dwell).q

    assert q[chosen_s] <= min(q.values()) * 1.002


def test_more_drift_asks_for_a_shorter_dwell_and_slower_moves_for_a_longer_one():
    def chosen_s(drift, settle_s):
        measurement = without_dwell(expect__drift_per_sqrt_hour=drift, itinerary__laps=2)
        return float(compose(measurement, lantern_rig(axes__mask__settle_s=settle_s)).dwell_s[0])

    assert chosen_s(0.1, 0.5) < chosen_s(0.03, 0.5) < chosen_s(0.01, 0.5) < chosen_s(0.01, 3.0)


def test_neyman_allocation_brings_what_it_should():
    rig = lantern_rig()
    plans = {
        key: lantern(itinerary__dwell=dwell, positions__time=time, itinerary__dwell_s=20.0, itinerary__laps=2)
        for key, (dwell, time) in {
            "equal": ("equal", "uniform"),
            "best": ("best", "uniform"),
            "worth": ("equal", "worth"),
        }.items()
    }

    variance = {key: forecast(compose(plan, rig), plan).kappa_counting_se ** 2 for key, plan in plans.items()}

    # three equal slits, background 0.02 of a single slit: 1.31 and 2.1 by (sum of roots)^2 against 8 sums
    assert variance["equal"] / variance["best"] > 1.30
    assert variance["equal"] / variance["worth"] > 1.9


def test_predicted_variance_is_what_20000_simulated_nights_show():
    plan = lantern(itinerary__dwell="best", positions__time="worth", itinerary__laps=2)
    itinerary = compose(plan, lantern_rig())
    pattern = pattern_of_itinerary(itinerary, "pairwise")
    cell = itinerary.position_index * 8 + itinerary.opening_index
    exposure_s = np.asarray(np.bincount(cell, itinerary.dwell_s).reshape(41, 8), float)
    rng = np.random.default_rng(20261202)
    nights = 20_000

    counts = rng.poisson(itinerary.rates_hz * exposure_s, (nights, 41, 8))
    kappas = np.array([pattern.kappa_of(night / exposure_s) for night in counts])

    # dead time off: the counts above have none; four standard errors of a variance, 4 sqrt(2 / 20000) = 4 %,
    # are more than the 3 % that are asked for, so that 3 % are two standard errors too many to be chance
    predicted = pattern.counting_variances(exposure_s, 0.0).sum()
    assert kappas.var() == pytest.approx(predicted, rel=0.03)
