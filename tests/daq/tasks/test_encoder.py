"""Encoder: one on the stage sees what the counts see, one on the motor does not, another scale is told."""

from __future__ import annotations

import numpy as np

from daq.tasks.encoder import Seen, seen_by

COUNTING_MM = 0.0003


def seen(seed: int, scale: float = 1.0, on_motor: bool = False) -> Seen:
    """Return what an encoder sees of three flanks, 8 um of play and 1 um of chance."""
    random = np.random.default_rng(seed)
    encoders, places = [], []
    for _ in range(3):
        target = np.resize(np.repeat([0.0, -0.015, 0.015], 4), 20)
        true = target + np.resize([0.004, -0.004, -0.004, 0.004], 20) + 0.001 * random.standard_normal(20)
        encoders.append(target if on_motor else true / scale)
        places.append(true + COUNTING_MM * random.standard_normal(20))
    return seen_by(encoders, places, COUNTING_MM)


def test_an_encoder_on_the_stage_sees_as_much_nearly_always() -> None:
    found = [seen(seed) for seed in range(200)]

    assert sum(one.scaled and not one.blind for one in found) >= 195
    pulls = np.array([(one.slope - 1) / one.se for one in found])
    assert abs(pulls.mean()) < 4 / np.sqrt(200)
    assert abs(pulls.std(ddof=1) - 1) < 4 / np.sqrt(2 * 200)


def test_an_encoder_on_the_motor_is_told() -> None:
    assert all(seen(seed, on_motor=True).blind for seed in range(50))
    assert "it sits on the motor" in seen(1, on_motor=True).said


def test_an_encoder_of_another_scale_is_told() -> None:
    found = seen(2, scale=1.05)

    assert not found.scaled
    assert "of its size by the counts" in found.said
