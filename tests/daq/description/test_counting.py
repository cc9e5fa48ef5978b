from __future__ import annotations

from typing import Any

import pytest

from daq.description import joint_problems, parse
from daq.errors import DescriptionError
from tests.examples import lantern, lantern_rig, measurement_table


def refused(**tables: dict[str, Any]) -> str:
    """Return why a measurement with these tables is refused."""
    table = measurement_table()
    for name, keys in tables.items():
        table[name] = table.get(name, {}) | keys
    with pytest.raises(DescriptionError) as caught:
        parse(table, "measurement.toml", "measurement")
    return str(caught.value)


@pytest.mark.parametrize("keys", [{"fano": 1.2}, {"dead_time_s": 1e-9}])
def test_what_is_for_counts_is_refused_for_power(keys: dict[str, Any]) -> None:
    said = refused(estimate={"counting": "power", "dead_time_s": 0.0, "dead_time_u_s": 0.0} | keys)

    assert "dead time, fano and heralded are for counts, not for power readings" in said


def test_a_power_bench_is_described_by_one_key() -> None:
    found = lantern(estimate__counting="power", estimate__dead_time_s=0.0, estimate__dead_time_u_s=0.0)

    assert found.estimate.counting == "power"


@pytest.mark.parametrize(
    ("key", "value", "named"),
    [
        ("estimate__monitor_channel", 1, "estimate.monitor_channel: there is no channel 1"),
        (
            "estimate__heralded",
            {"signal": 1, "idler": 2, "window_s": 1e-9},
            "estimate.heralded.signal: there is no channel 1",
        ),
    ],
)
def test_a_channel_that_the_counter_does_not_have_is_named(key: str, value: Any, named: str) -> None:
    measurement = lantern(**{key: value})

    problems = joint_problems(measurement, lantern_rig(), "lantern.toml")
    with_channels = joint_problems(measurement, lantern_rig(devices__counter__channels=3), "lantern.toml")

    assert problems and named in problems[0]
    assert with_channels == ()


def test_no_rule_on_counts_may_bite_at_two_or_three_sigma() -> None:
    said = refused(quality={"fingerprint_p": 0.01, "monitor_sigma": 2.0})

    assert "quality.fingerprint_p" in said and "quality.monitor_sigma" in said


@pytest.mark.parametrize("fano", [0.0, -1.0, float("nan")])
def test_a_fano_factor_is_above_zero(fano: float) -> None:
    assert "estimate.fano" in refused(estimate={"fano": fano})


def test_a_negative_dead_time_is_refused() -> None:
    assert "estimate.dead_time_s" in refused(estimate={"dead_time_s": -1e-9})
