"""Errors in short, and without what a device replied."""

from __future__ import annotations

import pytest

from daq.errors import DeviceError, in_short, without_replies


@pytest.mark.parametrize(
    ("what", "kind", "said"),
    [
        ("b'412908' in reply to 'TOT?'", "garbage", "it gave a reply that makes no sense"),
        (
            "only b'4129' came in reply to 'TOT?' in time",
            "timeout",
            "only ... came in reply to 'TOT?' in time",
        ),
        ("it refused 'ARM': \"412908\" pending", "refused", "it refused ...: ... pending"),
        ("nobody answers", "lost", "nobody answers"),
    ],
)
def test_a_reply_is_not_quoted_and_the_question_may_be(what: str, kind: str, said: str) -> None:
    error = without_replies(DeviceError(what, where="counter", remedy="Look", kind=kind))

    assert (error.what, error.where, error.remedy, error.kind) == (said, "counter", "Look", kind)


def test_an_error_in_short_gives_no_advice() -> None:
    assert in_short(DeviceError("no reply", where="counter", remedy="Resume")) == "counter: no reply."
