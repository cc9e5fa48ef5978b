"""A storm of faults on a stage: no move ends silently at a wrong place (of counts, `test_links` speaks)."""

from __future__ import annotations

from tests.studies.study_storm import moves


def test_no_position_is_silently_wrong_in_a_storm_of_faults() -> None:
    storm = moves(600, 0.2)

    assert storm.injected >= 300
    assert (storm.wrong, storm.good + storm.loud) == (0, 600)
    assert storm.good >= 300
