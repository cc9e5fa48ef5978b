from __future__ import annotations

import numpy as np
import pytest

from daq.estimate import Running, blind_offset, shown
from tests.daq.estimate.nights import plan

SECRET = bytes(range(32))


def test_the_same_secret_gives_the_same_offset_and_another_scope_another() -> None:
    one, _ = blind_offset(SECRET, "campaign", "ABC", "0.001")
    again, _ = blind_offset(SECRET, "campaign", "ABC", "0.001")
    other, _ = blind_offset(SECRET, "campaign-2", "ABC", "0.001")

    assert one == again != other


def test_offsets_fill_the_whole_width_evenly() -> None:
    offsets = [blind_offset(SECRET, f"scope-{number}", "ABC", "0.5")[0] for number in range(4000)]

    # Uniform on +-0.5: mean 0 to +-0.0046, variance 1/12 to +-1.4 % (kurtosis 9/5): five of them.
    assert np.abs(offsets).max() < 0.5
    assert np.mean(offsets) == pytest.approx(0.0, abs=0.023)
    assert np.var(offsets) == pytest.approx(1 / 12, rel=0.071)


@pytest.mark.parametrize(
    ("secret", "scope", "halfwidth", "words"),
    [
        (SECRET[:31], "a", "0.001", "32 bytes or more, not 31"),
        (SECRET, "a\nb", "0.001", "plain ASCII on one line"),
        (SECRET, "ä", "0.001", "plain ASCII on one line"),
        (SECRET, "a", "-0.001", "must be above zero"),
        (SECRET, "a", "wide", "could not convert"),
    ],
)
def test_what_could_not_be_checked_later_is_refused(
    secret: bytes, scope: str, halfwidth: str, words: str
) -> None:
    with pytest.raises(ValueError, match=words):
        blind_offset(secret, scope, "ABC", halfwidth)


def test_an_open_run_is_shown_and_any_other_is_not() -> None:
    estimate = Running(plan()).estimate()

    assert shown(estimate, "open") is estimate
    with pytest.raises(ValueError, match="open runs only"):
        shown(estimate, "frozen")
