"""A drawn course of the source wanders as much as its structure function says."""

import numpy as np
import pytest

from daq.itinerary.drawn import drawn_level
from daq.itinerary.wander import Wander

COURSES = 400
TIME_S = np.arange(0.0, 2000.0, 2.0)


@pytest.mark.parametrize(
    "wander",
    [
        Wander(walk_per_s=1e-7),
        Wander(ramp_per_s2=1e-10),
        Wander(relaxing=((1e-4, 300.0),)),
        Wander(lines=((0.01, 500.0),)),
        Wander(walk_per_s=1e-7, relaxing=((1e-5, 50.0), (1e-4, 900.0)), lines=((0.005, 700.0),)),
    ],
)
@pytest.mark.parametrize("lag", [5, 60, 400])
def test_its_mean_square_difference_is_the_structure_function(wander, lag):
    generator = np.random.default_rng(5)
    squares = np.array(
        [
            (log[lag] - log[0]) ** 2
            for log in (np.log(drawn_level(wander, TIME_S, generator)) for _ in range(COURSES))
        ]
    )

    expected = float(wander.structure(np.array([TIME_S[lag]]))[0])
    # the square of a normal has a variance of twice its mean squared: five standard errors of the mean
    assert squares.mean() == pytest.approx(expected, abs=5 * expected * np.sqrt(2 / COURSES))
