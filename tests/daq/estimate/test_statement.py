from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from daq.estimate.statement import rounded_up, statement


@given(st.floats(1e-12, 1e6))
def test_a_limit_is_never_rounded_down(limit: float) -> None:
    found = rounded_up(limit)

    assert limit * (1 - 1e-12) <= found <= limit * 1.0101


@pytest.mark.parametrize(
    ("limit", "expected"), [(1.934189e-4, 1.94e-4), (1.94e-4, 1.94e-4), (0.999001, 1.0), (0.0, 0.0)]
)
def test_three_digits_are_kept(limit: float, expected: float) -> None:
    assert rounded_up(limit) == pytest.approx(expected, rel=1e-12)


def test_after_an_end_that_looked_at_kappa_the_whole_night_speaks() -> None:
    once, later = (statement(1e-5, 8e-5, 18, whole_night=wide) for wide in (None, 3.4))

    assert later.limit == rounded_up(1e-5 + 3.4 * 8e-5) > once.limit
    assert later.interval_95 == pytest.approx((1e-5 - 3.4 * 8e-5, 1e-5 + 3.4 * 8e-5))


def test_a_systematic_uncertainty_widens_everything() -> None:
    bare, whole = statement(1e-5, 8e-5, 18), statement(1e-5, 8e-5, 18, [(6e-5, None)])

    assert whole.total_se == pytest.approx(1e-4)
    assert whole.limit > bare.limit and whole.sensitivity > bare.sensitivity
    assert whole.dof > bare.dof
