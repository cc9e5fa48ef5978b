"""Turns: a knob is turned only to where it does not stand, and each has its caution, the first time."""

from __future__ import annotations

import pytest

from daq.description.by_hand import Dial
from daq.errors import DaqError
from daq.tasks.contract import Ask
from daq.tasks.turns import CAUTIONS, by_nobody, light_room, put_attenuator, set_detector, told_once


def test_a_knob_is_turned_only_to_where_it_does_not_stand() -> None:
    asks = [Ask("", 1.0, turn=put_attenuator(share)) for share in (1.0, 0.5, 0.5, 1.0)]

    assert [ask.turn and ask.turn.value for ask in told_once(asks)] == [1.0, 0.5, None, 1.0]


def test_every_knob_is_cautioned_of_where_it_is_turned_first() -> None:
    dial = Dial(now=1000, low=900, high=1100)
    turns = (set_detector(dial, 950), light_room(True), set_detector(dial, 960), put_attenuator(0.5))

    told = [ask.turn.caution for ask in told_once(Ask("", 1.0, turn=turn) for turn in turns) if ask.turn]

    assert told == [CAUTIONS["detector"], CAUTIONS["room light"], "", CAUTIONS["attenuator"]]


def test_a_turn_does_not_pass_for_done_where_nobody_is_there() -> None:
    with pytest.raises(DaqError, match=r"nobody is there to do this: Put the attenuator of 0\.5 in"):
        by_nobody(put_attenuator(0.5))


def test_every_caution_defers_to_local_rules() -> None:
    assert all("ocal" in caution and "rules" in caution for caution in CAUTIONS.values())
