from __future__ import annotations

import numpy as np
import pytest

from daq.estimate import Blinding, blind_offset
from daq.estimate.blinding import GENESIS, STATES, blind_digest, chained, commitment, revealed_offset

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


def test_a_published_digest_gives_offset_and_commitment_without_the_secret() -> None:
    offset, promised = blind_offset(SECRET, "campaign", "ABC", "0.001")

    digest = blind_digest(SECRET, "campaign", "ABC", "0.001")

    assert revealed_offset(digest, "0.001") == offset
    assert commitment(digest, "campaign", "ABC", "0.001") == promised
    assert commitment(digest, "campaign", "ABC", "0.01") != promised


@pytest.mark.parametrize("state", [*STATES, "", "OPEN", "None"])
def test_only_an_open_and_a_revealed_run_may_be_seen(state: str) -> None:
    assert Blinding(state).hides == (state not in ("open", "revealed"))


def test_an_offset_is_in_no_text_that_python_writes_of_a_blinding() -> None:
    assert "0.00123" not in repr(Blinding("blinded", {"ABC": 0.00123}))


def test_an_event_changed_later_breaks_the_chain() -> None:
    first = {"seq": 0, "event": "blind.open", "scope": "ä"}

    assert chained(GENESIS, first) != chained(GENESIS, first | {"scope": "b"})
    assert chained(GENESIS, dict(reversed(first.items()))) == chained(GENESIS, first)
