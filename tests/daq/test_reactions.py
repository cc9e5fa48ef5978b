import pytest

from daq.reactions import TABLE, Action, reaction


def test_a_lost_link_is_opened_again_with_growing_waits():
    waits = [reaction("lost", tries, 0.0)[1] for tries in range(9)]

    assert waits == [0, 1, 2, 5, 10, 30, 60, 60, 60]


@pytest.mark.parametrize("kind", ["timeout", "lost", "garbage"])
def test_recovery_is_limited_by_elapsed_time_not_by_tries(kind):
    limit_s = TABLE[kind].limit_s

    assert reaction(kind, 1000, limit_s)[0] is not Action.PARK
    assert reaction(kind, 0, limit_s + 1)[0] is Action.PARK


@pytest.mark.parametrize("kind", ["refused", "never heard of"])
def test_a_refusal_parks(kind):
    assert reaction(kind, 0, 0.0) == (Action.PARK, 0.0)
