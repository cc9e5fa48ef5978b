import pytest

from daq.reactions import TABLE, Action, reaction

CURABLE = sorted(kind for kind, entry in TABLE.items() if entry.action is not Action.PARK)


def test_a_lost_link_is_opened_again_with_growing_waits_and_slowly_after_half_an_hour():
    waits = [reaction("lost", tries, 0.0)[1] for tries in range(9)]

    assert waits == [0, 1, 2, 5, 10, 30, 60, 60, 60]
    assert reaction("lost", 40, 1801.0)[1] == 300


@pytest.mark.parametrize("kind", CURABLE)
def test_recovery_is_limited_by_elapsed_time_not_by_tries(kind):
    limit_s = TABLE[kind].limit_s

    assert reaction(kind, 1000, min(limit_s, 1e9))[0] is not Action.PARK
    if limit_s < float("inf"):
        assert reaction(kind, 0, limit_s + 1)[0] is Action.PARK


@pytest.mark.parametrize("kind", ["interlock", "overload", "reference", "alarm", "labels", "flank"])
def test_what_may_do_harm_is_cleared_at_the_bench_only(kind):
    assert reaction(kind, 0, 0.0)[0] is Action.HOLD_AT_BENCH


@pytest.mark.parametrize("kind", ["forbidden", "never heard of"])
def test_what_the_table_does_not_know_parks(kind):
    assert reaction(kind, 0, 0.0) == (Action.PARK, 0.0)
