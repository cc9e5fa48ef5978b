"""What a person sets at a bench: what cannot be meant is refused with where and why."""

from __future__ import annotations

from typing import Any

import pytest

from daq.errors import DescriptionError
from tests.examples import lantern_rig


@pytest.mark.parametrize(
    ("table", "said"),
    [
        ({"detector": {"now": 1200, "low": 850, "high": 1100}}, "now = 1200 lies outside low .. high"),
        ({"detector": {"now": 900, "low": 1100, "high": 850}}, "low must lie below high"),
        ({"attenuators": [0.5, 0.25, 0.1]}, "from 1.0"),
        ({"attenuators": [1.0, 0.5]}, "3 or more"),
        ({"attenuators": [1.0, 0.5, 0.5]}, "each smaller than the one before"),
        ({"bias": 3}, "by_hand.bias"),
    ],
)
def test_what_cannot_be_meant_is_refused(table: dict[str, Any], said: str) -> None:
    with pytest.raises(DescriptionError) as refused:
        lantern_rig(by_hand=table)

    assert said in str(refused.value)
    assert "by_hand" in str(refused.value)
