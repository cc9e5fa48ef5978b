"""Windows: as exact as the counts allow, and how far a stage that scatters stands off."""

from __future__ import annotations

import numpy as np
import pytest

from daq.errors import DaqError
from daq.tasks.windows import fitted, together, window

EDGE_MM = 0.1


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


def test_a_fit_without_edges_is_refused_with_a_sentence() -> None:
    place_mm = np.arange(-1.0, 1.0001, EDGE_MM)

    with pytest.raises(DaqError, match=r"does not converge.*nothing was moved further"):
        fitted(place_mm, np.full(len(place_mm), 700.0), np.array([10.0, 700.0, -0.5, 0.5, 0.1]))


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
