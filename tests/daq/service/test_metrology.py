import numpy as np
import pytest

from daq.itinerary import compose
from daq.service.load import Loaded, Wishes
from daq.service.metrology import described
from tests.examples import lantern, lantern_rig


def said_of(rig):
    measurement = lantern()
    loaded = Loaded(measurement, rig, {}, Wishes())
    return described(loaded, compose(measurement, rig))


def test_slits_that_all_openings_share_have_no_load():
    found = said_of(lantern_rig(slits__A__centre_u_m=1e-7))

    assert found["slit_loads"] == {"A centre": pytest.approx(0.0, abs=1e-12)}


def test_a_slit_cut_apart_is_named_with_its_opening():
    cut = {"A": {"centre_m": -120e-6, "width_m": 40e-6, "centre_u_m": 1e-7}}
    found = said_of(lantern_rig(mask__openings__AB={"at_mm": 4.0, "cuts": cut}))

    assert list(found["slit_loads"]) == ["A of AB centre"]
    assert abs(found["slit_loads"]["A of AB centre"]) > 1e-6


def test_the_slope_is_that_of_the_expected_rates():
    found = said_of(lantern_rig())
    measurement, rig = lantern(), lantern_rig()
    itinerary = compose(measurement, rig)
    step = itinerary.positions_mm[1] - itinerary.positions_mm[0]

    slope = np.array(found["slope_per_mm"])

    assert slope.shape == itinerary.rates_hz.shape
    assert np.allclose(slope[:, 0], 0.0)  # the background has none
    # A single slit changes slowly: central differences over two steps are within a few percent of its slope.
    coarse = (np.log(itinerary.rates_hz[2:, 1]) - np.log(itinerary.rates_hz[:-2, 1])) / (2 * step)
    assert slope[1:-1, 1] == pytest.approx(coarse, abs=0.03)
