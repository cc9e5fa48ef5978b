from __future__ import annotations

import pytest

from daq.report.numbers import upwards, with_error


@pytest.mark.parametrize(
    ("value", "said"), [(1.9401e-4, "0.000195"), (1.94e-4, "0.000194"), (0.012341, "0.0124"), (2.0, "2")]
)
def test_a_limit_is_rounded_up(value, said):
    assert upwards(value) == said


def test_a_value_and_its_error_share_a_power_of_ten():
    assert with_error(-5.4e-6, 1.06e-4) == "−0.05e-04 ± 1.06e-04"
