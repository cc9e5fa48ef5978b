from __future__ import annotations

from math import inf, sqrt

import numpy as np
import pytest

from daq.estimate import null_limit


def test_without_systematic_causes_the_limit_is_the_value_and_its_bar() -> None:
    limit, total, dof = null_limit(-2.0, 1.0, 18)

    assert (limit, total, dof) == pytest.approx((2.0 + 1.7340636066175388, 1.0, 18.0))


def test_a_known_cause_widens_and_brings_no_doubt_of_its_own() -> None:
    _, total, dof = null_limit(0.0, 3.0, 10, [(4.0, None)])

    assert total == pytest.approx(5.0)
    assert dof == pytest.approx(5.0**4 / (3.0**4 / 10))


def test_known_errors_alone_are_normal() -> None:
    limit, _, dof = null_limit(0.0, 1.0, inf)

    assert limit == pytest.approx(1.6448536269514722)
    assert dof == inf


def test_the_claim_is_false_at_most_once_in_twenty() -> None:
    generator = np.random.default_rng(12)
    truth, nights, pairs = 3.0, 20_000, 12
    values = generator.normal(truth, sqrt(pairs), (nights, pairs))
    se = values.std(axis=1, ddof=1) / sqrt(pairs)

    held = [
        truth <= null_limit(mean, bar, pairs - 1)[0]
        for mean, bar in zip(values.mean(axis=1), se, strict=True)
    ]

    # 95 % or more; standard error 0.15 %, four of them. Above 96.5 % the limit would be wasteful here.
    assert 0.944 < np.mean(held) < 0.965


@pytest.mark.parametrize(("se", "dof"), [(0.0, 5.0), (1.0, 0.0)])
def test_a_limit_without_error_or_freedom_is_refused(se: float, dof: float) -> None:
    with pytest.raises(ValueError, match="above zero"):
        null_limit(0.0, se, dof)
