"""The forest: an odd night stands out, a hidden kappa has no zero, and many nights still fit."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from daq.errors import DescriptionError
from daq.report.forest import Line, draw_forest
from daq.report.planned import ACCENT

TOGETHER = [("by counts", 1e-5, (-1e-4, 1.2e-4))]
DASHES = "stroke-dasharray: 3.2,2.4"


def nights(many: int, odd_p: float = 1.0) -> list[Line]:
    kappas = np.random.default_rng(1).normal(0.0, 2e-4, many)
    found = [Line(f"night-{at}", kappa, 2e-4, 18.0, 1 / many, 1.0) for at, kappa in enumerate(kappas)]
    return [*found[:-1], Line("night-x", 2e-3, 2e-4, 18.0, 1 / many, odd_p)]


def drawn(tmp_path: Path, many: int = 6, odd_p: float = 1.0, zero: bool = True) -> str:
    path = tmp_path / "forest.svg"
    draw_forest(path, nights(many, odd_p), TOGETHER, "nights", zero=zero)
    return path.read_text()


def test_a_night_that_does_not_fit_stands_out(tmp_path):
    assert ACCENT in drawn(tmp_path, odd_p=0.01)
    assert ACCENT not in drawn(tmp_path, odd_p=0.5)


def test_zero_is_drawn_unless_kappa_is_hidden(tmp_path):
    assert DASHES in drawn(tmp_path)
    assert DASHES not in drawn(tmp_path, zero=False)


def height_in(svg: str) -> float:
    return float(svg.partition('height="')[2].partition("pt")[0]) / 72


def test_many_nights_still_fit_on_a_page_that_can_be_read(tmp_path):
    assert height_in(drawn(tmp_path)) < 5
    assert height_in(drawn(tmp_path, 300)) < 25
    assert height_in(drawn(tmp_path, 700)) == pytest.approx(40)


def test_another_ending_is_refused(tmp_path):
    with pytest.raises(DescriptionError, match="a picture ends in"):
        draw_forest(tmp_path / "forest.gif", nights(3), TOGETHER, "nights")
