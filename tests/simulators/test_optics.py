"""Optics: amplitudes add, so that no third-order term can appear."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from simulators.optics import intensity

LANTERN = (532e-9, 1.2)


@settings(max_examples=25, deadline=None)
@given(
    centres_um=st.lists(st.floats(-500, 500), min_size=3, max_size=3),
    widths_um=st.lists(st.floats(1, 100), min_size=3, max_size=3),
    position_mm=st.floats(-20, 20),
)
def test_the_signed_sum_of_all_openings_vanishes(
    centres_um: list[float], widths_um: list[float], position_mm: float
) -> None:
    slits = [(centre * 1e-6, width * 1e-6) for centre, width in zip(centres_um, widths_um, strict=True)]
    place_m = np.array([position_mm * 1e-3])

    light = [
        intensity(place_m, [slit for bit, slit in enumerate(slits) if mask >> bit & 1], *LANTERN)[0]
        for mask in range(8)
    ]

    signs = [-1 if mask.bit_count() % 2 == 0 else 1 for mask in range(8)]
    most = sum(width for _, width in slits) ** 2  # all points in phase
    assert abs(sum(sign * value for sign, value in zip(signs, light, strict=True))) < 1e-13 * most


def test_no_open_slit_gives_darkness() -> None:
    assert intensity(np.linspace(-1e-3, 1e-3, 5), [], *LANTERN).tolist() == [0.0] * 5


def test_a_slit_moved_aside_moves_its_pattern_with_it() -> None:
    place_m = np.linspace(-5e-3, 5e-3, 21)

    moved = intensity(place_m + 1e-4, [(1e-4, 4e-5)], *LANTERN)

    assert np.allclose(moved, intensity(place_m, [(0.0, 4e-5)], *LANTERN), rtol=1e-9)


def test_light_falls_off_with_the_path_and_not_only_with_the_angle() -> None:
    narrow = [(0.0, 1e-12)]  # its own pattern is flat to 1e-11

    ahead, aside = intensity(np.array([0.0, 1.2]), narrow, *LANTERN)

    assert aside / ahead == pytest.approx(1 / np.sqrt(2), rel=1e-9)
