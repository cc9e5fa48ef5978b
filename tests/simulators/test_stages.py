"""Stages: what a simulated controller does with the words of a line."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from simulators.clock import VirtualClock
from simulators.gcode import RefusalError, parse
from simulators.motion import Track
from simulators.stages import StageController, Travel

S = 1_000_000_000


class Bench:
    """A controller of X (0 .. 20 mm, 10 mm/s) and Y (-15 .. 15 mm, 32 mm/s), and one line to it."""

    def __init__(self, homed: bool = True) -> None:
        self.clock = VirtualClock(0)
        self.tracks = {"X": Track(7.0, 0.0, homed), "Y": Track(3.0, -15.0, homed)}
        travel = {"X": Travel((0.0, 20.0), 10.0), "Y": Travel((-15.0, 15.0), 32.0)}
        self.controller = StageController(self.tracks, travel, self.clock)
        self.session = self.controller.session(lambda data: None)

    def ask(self, line: str) -> str:
        return self.session.feed(line.encode() + b"\n").decode().strip()

    def wait(self, seconds: float) -> None:
        self.clock.sleep_until(self.clock.now_ns() + round(seconds * S))


def test_a_move_is_taken_at_once_and_takes_distance_over_speed() -> None:
    bench = Bench()

    reply = bench.ask("G90 G1 X17.0 F300")

    assert reply == "taken"
    bench.wait(1.0)
    assert bench.ask("M101") == "axes X 17.0000 12.0000 moving homed, Y 3.0000 3.0000 still homed, alarm none"
    bench.wait(1.0)
    assert bench.ask("M101") == "axes X 17.0000 17.0000 still homed, Y 3.0000 3.0000 still homed, alarm none"


def test_rapid_moves_go_at_full_speed_and_both_axes_at_once() -> None:
    bench = Bench()

    bench.ask("G0 X17 Y-13")

    bench.wait(0.5)
    assert bench.ask("M101") == (
        "axes X 17.0000 12.0000 moving homed, Y -13.0000 -13.0000 still homed, alarm none"
    )


def test_motion_word_and_speed_stay_for_the_next_line() -> None:
    bench = Bench()
    bench.ask("G1 X8 F600")
    bench.wait(1.0)

    reply = bench.ask("X9")

    assert reply == "taken"
    bench.wait(0.05)
    assert "X 9.0000 8.5000 moving" in bench.ask("M101")


def test_a_new_target_takes_the_place_of_the_one_under_way() -> None:
    bench = Bench()
    bench.ask("G0 X17")
    bench.wait(0.5)

    bench.ask("G0 X7")

    bench.wait(0.5)
    assert "X 7.0000 7.0000 still" in bench.ask("M101")


def test_an_axis_that_is_not_homed_refuses_to_move_and_then_finds_its_reference() -> None:
    bench = Bench(homed=False)
    refused = bench.ask("G0 X5")

    bench.ask("G28 X0")

    assert refused == "refused 4 X not homed"
    bench.wait(0.35)
    assert "X -7.0000 -3.5000 moving lost" in bench.ask("M101")  # counts from where it was switched on
    bench.wait(0.35)
    assert bench.ask("M101") == "axes X 0.0000 0.0000 still homed, Y 0.0000 0.0000 still lost, alarm none"


def test_homing_without_a_word_homes_every_axis() -> None:
    bench = Bench(homed=False)

    bench.ask("G28")

    bench.wait(1.0)
    assert bench.ask("M101").count("still homed") == 2


def test_a_stop_has_no_reply_and_leaves_every_axis_where_it_is() -> None:
    bench = Bench()
    bench.ask("G0 X17 Y15")
    bench.wait(0.1)

    reply = bench.ask("M0")

    assert reply == ""
    bench.wait(5.0)
    assert bench.ask("M101") == "axes X 8.0000 8.0000 still homed, Y 6.2000 6.2000 still homed, alarm none"


def test_a_stop_while_looking_for_the_reference_leaves_the_axis_lost() -> None:
    bench = Bench(homed=False)
    bench.ask("G28 X0")
    bench.wait(0.1)

    bench.ask("M0")

    bench.wait(5.0)
    assert "X -1.0000 -1.0000 still lost" in bench.ask("M101")


def test_a_dwell_keeps_moves_back() -> None:
    bench = Bench()
    bench.ask("G4 P0.5")

    refused = bench.ask("G0 X5")

    assert refused == "refused 5 still dwelling"
    bench.wait(0.5)
    assert bench.ask("G0 X5") == "taken"


def test_an_alarm_stops_the_axes_and_refuses_moves_until_it_is_cleared() -> None:
    bench = Bench()
    bench.ask("G0 X17")
    bench.wait(0.5)

    bench.controller.trip("stall")

    assert bench.ask("M101").startswith("axes X 12.0000 12.0000 still homed")
    assert bench.ask("M101").endswith("alarm stall")
    assert bench.ask("G0 X5") == bench.ask("G28") == "refused 6 alarm stall"
    assert bench.ask("M102") == "taken"
    assert bench.ask("G0 X5") == "taken"


@pytest.mark.parametrize(
    ("line", "refused"),
    [
        ("G0 X20.001", "refused 3 X target outside travel"),
        ("G0 X5 Y-15.001", "refused 3 Y target outside travel"),
        ("G1 X5", "refused 2 X cannot move at that speed"),
        ("G1 X5 F601", "refused 2 X cannot move at that speed"),
        ("G1 X5 F-600", "refused 2 a negative speed"),
        ("G28 X1", "refused 2 the reference has no other place than 0"),
        ("G0 Z1", "refused 1 no such axis"),
        ("G91 X1", "refused 1 no such G word here"),
        ("G0 G28 X0", "refused 1 no such G word here"),
        ("M30", "refused 1 no such M word here"),
        ("M0 X1", "refused 1 no such M word here"),
        ("G0 X1 X2", "refused 1 a word stands there twice"),
        ("G0 XNAN", "refused 1 not a line of words"),
        ("G0 XINF", "refused 1 not a line of words"),
        ("G0 X1e9", "refused 1 no such axis"),
        ("G0 X", "refused 1 not a line of words"),
        ("G0 X5 (open", "refused 1 not a line of words"),
        ("G0 X5\xff", "refused 1 not a line of words"),
    ],
)
def test_what_is_refused_moves_nothing(line: str, refused: str) -> None:
    bench = Bench()
    before = bench.ask("M101")

    reply = bench.ask(line)

    assert reply == refused
    bench.wait(1.0)
    assert bench.ask("M101") == before


def test_a_line_of_blanks_has_no_reply_and_a_word_that_moves_nothing_is_taken_in_an_alarm_too() -> None:
    bench = Bench()
    bench.controller.trip("stall")

    assert [bench.ask(" "), bench.ask("G90")] == ["", "taken"]


def test_blanks_case_comments_and_line_numbers_do_not_matter() -> None:
    block = parse("n10 g1 x 4.5 (to AB) f6 00")

    assert (block.g, block.m, block.values) == (("1",), (), {"X": 4.5, "F": 600.0})


@given(line=st.text(max_size=60))
def test_any_text_is_words_or_refused(line: str) -> None:
    try:
        values = parse(line).values
    except RefusalError as refusal:
        assert refusal.number == 1
    else:
        assert all(abs(value) < float("inf") for value in values.values())


def test_lines_may_come_in_any_pieces() -> None:
    bench = Bench()

    pieces = [bench.session.feed(piece) for piece in (b"M1", b"00", b"\r\nM", b"100\nM10")]

    assert pieces == [b"", b"", b"tercet-stages 1 axes XY\n", b"tercet-stages 1 axes XY\n"]


def test_bytes_without_a_line_end_do_not_pile_up() -> None:
    bench = Bench()

    reply = bench.session.feed(b"X" * 5000)

    assert re.fullmatch(rb"refused 1 [a-z ]+\n", reply)
    assert bench.ask("M100") == "tercet-stages 1 axes XY"
