"""Status bits and error numbers of the simulated instruments against the standards."""

from __future__ import annotations

import pytest

from daq.devices.counter import MEASURING
from daq.devices.sensor import NOT_A_NUMBER
from simulators.counters import MEASURING as SIMULATED_MEASURING
from simulators.scpi import ERRORS
from simulators.status import Event, Summary


# IEEE 488.2, sect. 11.5 (standard event status register); read in four instruments' programming manuals.
@pytest.mark.parametrize(
    ("bit", "weight"),
    [
        (Event.OPERATION_COMPLETE, 1),
        (Event.QUERY_ERROR, 4),
        (Event.DEVICE_ERROR, 8),
        (Event.EXECUTION_ERROR, 16),
        (Event.COMMAND_ERROR, 32),
        (Event.POWER_ON, 128),
    ],
)
def test_event_bits_have_the_weights_of_the_standard(bit: Event, weight: int) -> None:
    assert bit == weight


# IEEE 488.2, sect. 11.2, and SCPI-1999, vol. 1, sect. 9 (status byte); read in a programming manual's table.
@pytest.mark.parametrize(
    ("bit", "weight"),
    [
        (Summary.ERROR_QUEUE, 4),
        (Summary.QUESTIONABLE, 8),
        (Summary.MESSAGE, 16),
        (Summary.EVENT, 32),
        (Summary.MASTER, 64),
        (Summary.OPERATION, 128),
    ],
)
def test_status_byte_bits_have_the_weights_of_the_standard(bit: Summary, weight: int) -> None:
    assert bit == weight


# SCPI-1999, vol. 2, sect. 21.8: 0, -104, -108, -109, -113, -350 read; the others from memory.
@pytest.mark.parametrize(
    ("number", "text"),
    [
        (0, "No error"),
        (-101, "Invalid character"),
        (-104, "Data type error"),
        (-108, "Parameter not allowed"),
        (-109, "Missing parameter"),
        (-113, "Undefined header"),
        (-213, "Init ignored"),
        (-221, "Settings conflict"),
        (-222, "Data out of range"),
        (-230, "Data corrupt or stale"),
        (-350, "Queue overflow"),
    ],
)
def test_errors_have_the_texts_of_the_standard(number: int, text: str) -> None:
    assert ERRORS[number] == text


def test_measuring_is_bit_four_of_the_operation_register() -> None:
    # SCPI-1999, vol. 1, sect. 9 (operation status register, bit 4 MEASuring); from memory
    assert MEASURING == SIMULATED_MEASURING == 1 << 4


def test_what_was_not_measured_has_the_number_of_the_standard() -> None:
    # SCPI-1999, vol. 1, sect. 7.2.1: 9.91E37; read in a counter's programming guide
    assert NOT_A_NUMBER == 9.91e37
