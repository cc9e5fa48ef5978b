"""Least squares and propagation: certified and printed values.

NIST Statistical Reference Datasets, linear least squares: Norris, NoInt1, Longley, Wampler1 and Wampler2. The
data are from memory; that the certified digits come out says that they are right.
"""

from __future__ import annotations

import numpy as np
import pytest

from daq.estimate import jackknife
from daq.estimate.arrays import FloatArray
from daq.estimate.regression import weighted_fit
from daq.tasks.backlash import reversal

NORRIS_X = [
    0.2,
    337.4,
    118.2,
    884.6,
    10.1,
    226.5,
    666.3,
    996.3,
    448.6,
    777.0,
    558.2,
    0.4,
    0.6,
    775.5,
    666.9,
    338.0,
]
NORRIS_X += [
    447.5,
    11.6,
    556.0,
    228.1,
    995.8,
    887.6,
    120.2,
    0.3,
    0.3,
    556.8,
    339.1,
    887.2,
    999.0,
    779.0,
    11.1,
    118.3,
]
NORRIS_X += [229.2, 669.1, 448.9, 0.5]
NORRIS_Y = [
    0.1,
    338.8,
    118.1,
    888.0,
    9.2,
    228.1,
    668.5,
    998.5,
    449.1,
    778.9,
    559.2,
    0.3,
    0.1,
    778.1,
    668.8,
    339.3,
]
NORRIS_Y += [
    448.9,
    10.8,
    557.7,
    228.3,
    998.0,
    888.8,
    119.6,
    0.3,
    0.6,
    557.6,
    339.3,
    888.0,
    998.5,
    778.9,
    10.2,
    117.6,
]
NORRIS_Y += [228.9, 668.4, 449.2, 0.2]

LONGLEY = [
    [60323, 83.0, 234289, 2356, 1590, 107608, 1947], [61122, 88.5, 259426, 2325, 1456, 108632, 1948],
    [60171, 88.2, 258054, 3682, 1616, 109773, 1949], [61187, 89.5, 284599, 3351, 1650, 110929, 1950],
    [63221, 96.2, 328975, 2099, 3099, 112075, 1951], [63639, 98.1, 346999, 1932, 3594, 113270, 1952],
    [64989, 99.0, 365385, 1870, 3547, 115094, 1953], [63761, 100.0, 363112, 3578, 3350, 116219, 1954],
    [66019, 101.2, 397469, 2904, 3048, 117388, 1955], [67857, 104.6, 419180, 2822, 2857, 118734, 1956],
    [68169, 108.4, 442769, 2936, 2798, 120445, 1957], [66513, 110.8, 444546, 4681, 2637, 121950, 1958],
    [68655, 112.6, 482704, 3813, 2552, 123366, 1959], [69564, 114.2, 502601, 3931, 2514, 125368, 1960],
    [69331, 115.7, 518173, 4806, 2572, 127852, 1961], [70551, 116.9, 554894, 4007, 2827, 130081, 1962],
]  # fmt: skip


def spread(columns: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray, float]:
    """Return coefficients, their standard deviations and the residual sum of squares of an unweighted fit."""
    found = weighted_fit(columns, values, np.ones(len(values)))
    return found.coefficients, np.sqrt(np.diag(found.covariance) * found.chi2 / found.dof), found.chi2


def test_norris() -> None:
    x, y = np.array(NORRIS_X), np.array(NORRIS_Y)

    coefficients, sd, rest = spread(np.stack([np.ones(36), x], axis=1), y)

    assert coefficients == pytest.approx([-0.262323073774029, 1.00211681802045], rel=1e-11)
    assert sd == pytest.approx([0.232818234301152, 0.429796848199937e-03], rel=1e-11)
    assert rest == pytest.approx(26.6173985294224, rel=1e-11)


def test_a_line_through_zero() -> None:
    """NoInt1."""
    coefficients, sd, rest = spread(np.arange(60.0, 71.0)[:, None], np.arange(130.0, 141.0))

    assert (coefficients[0], sd[0]) == pytest.approx((2.07438016528926, 0.165289256198347e-01), rel=1e-12)
    assert rest == pytest.approx(127.272727272727, rel=1e-12)


def test_longley() -> None:
    """Ill-conditioned: the columns nearly repeat one another (condition number 5e9)."""
    table = np.array(LONGLEY)

    coefficients, _, rest = spread(np.column_stack([np.ones(16), table[:, 1:]]), table[:, 0])

    certified = [-3482258.63459582, 15.0618722713733, -0.358191792925910e-01, -2.02022980381683]
    certified += [-1.03322686717359, -0.511041056535807e-01, 1829.15146461355]
    assert coefficients == pytest.approx(certified, rel=1e-7)
    assert np.sqrt(rest / 9) == pytest.approx(304.854073561965, rel=1e-9)


@pytest.mark.parametrize("scale", [1.0, 0.1], ids=["Wampler1", "Wampler2"])
def test_wampler(scale: float) -> None:
    """Exact polynomials of degree five: every coefficient is a power of the scale."""
    x = np.arange(21.0)
    powers = np.stack([x**power for power in range(6)], axis=1)

    coefficients, _, _ = spread(powers, powers @ scale ** np.arange(6))

    assert coefficients == pytest.approx(scale ** np.arange(6), rel=1e-7)


def test_columns_that_repeat_one_another_are_refused() -> None:
    column = np.arange(5.0)

    with pytest.raises(ValueError, match="cannot be told apart"):
        weighted_fit(np.stack([column, 2 * column], axis=1), column, np.ones(5))


def test_sets_of_simultaneous_observations() -> None:
    """JCGM 100:2008, H.2.4: R, X and Z from five sets of V, I and phase, from memory.

    127.732(71), 219.847(295), 254.260(236), correlations -0.588, -0.485, 0.993. A jackknife over the sets
    is the guide's second approach.
    """
    volt = np.array([5.007, 4.994, 5.005, 4.990, 4.999])
    ampere = np.array([19.663, 19.639, 19.640, 19.685, 19.678]) * 1e-3
    phase = np.array([1.0456, 1.0438, 1.0468, 1.0428, 1.0433])
    sets = np.stack([volt / ampere * np.cos(phase), volt / ampere * np.sin(phase), volt / ampere])

    without = (sets.sum(axis=1, keepdims=True) - sets) / 4
    u = [jackknife(part)[0] for part in without]

    assert sets.mean(axis=1) == pytest.approx([127.732, 219.847, 254.260], abs=5.1e-4)
    assert u == pytest.approx([0.071, 0.295, 0.236], abs=7e-4)
    r = np.corrcoef(without)
    assert (r[0, 1], r[0, 2], r[1, 2]) == pytest.approx((-0.588, -0.485, 0.993), abs=5.1e-4)


def test_the_calibration_of_a_thermometer() -> None:
    """JCGM 100:2008, H.3: corrections read at eleven temperatures, a line about 20 degrees; from memory.

    y1 = -0.1712(29), y2 = 0.002 18(67), r = -0.930, s = 0.0035; at 30 degrees -0.1494(41).
    """
    read = [21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511]
    correction = [-171, -169, -166, -159, -164, -165, -156, -157, -159, -161, -160]
    columns = np.stack([np.ones(11), np.array(read) - 20.0], axis=1)

    found = weighted_fit(columns, 1e-3 * np.array(correction), np.ones(11))

    covariance = found.covariance * found.chi2 / found.dof
    u = np.sqrt(np.diag(covariance))
    at_30 = np.array([1.0, 10.0])
    assert found.coefficients[0] == pytest.approx(-0.1712, abs=5.1e-5)
    assert found.coefficients[1] == pytest.approx(0.00218, abs=5.1e-6)
    assert u[0] == pytest.approx(0.0029, abs=5.1e-5)
    assert u[1] == pytest.approx(0.00067, abs=5.1e-6)
    assert covariance[0, 1] / (u[0] * u[1]) == pytest.approx(-0.930, abs=5.1e-4)
    assert np.sqrt(found.chi2 / found.dof) == pytest.approx(0.0035, abs=5.1e-5)
    assert at_30 @ found.coefficients == pytest.approx(-0.1494, abs=5.1e-5)
    assert np.sqrt(at_30 @ covariance @ at_30) == pytest.approx(0.0041, abs=5.1e-5)


def test_the_play_of_a_stage_comes_from_the_same_fit() -> None:
    """The values of Norris as places of a stage: the task gives what the certified fit gives."""
    number = len(NORRIS_Y)
    moved = np.where(np.arange(number) % 4 < 2, 1.0, -1.0)
    columns = np.stack([np.ones(number), moved / 2, np.arange(number) - (number - 1) / 2], axis=1)
    coefficients, sd, rest = spread(columns, np.array(NORRIS_Y))

    play, play_se, scatter = reversal(moved, np.array(NORRIS_Y))

    assert (play, play_se) == pytest.approx((coefficients[1], sd[1]), rel=1e-12)
    assert scatter == pytest.approx(np.sqrt(rest / (number - 3)), rel=1e-12)
