"""The clock of a run goes on while the run is broken off, so that hours, drift and UTC stay true."""

import numpy as np
import xarray as xr

from daq.service.equip import _break_ns

S = 10**9


def rows(utc_s: int, open_s: int, close_s: int) -> xr.Dataset:
    names = {"utc_ns": utc_s, "gate_open_ns": open_s, "gate_close_ns": close_s}
    return xr.Dataset({name: ("row", np.array([value * S])) for name, value in names.items()})


def test_the_clock_goes_on_by_as_much_as_has_passed_since_the_last_gate_closed():
    assert _break_ns(rows(utc_s=1000, open_s=50, close_s=52), 1602 * S) == 600 * S


def test_a_clock_that_was_set_back_meanwhile_takes_no_time_away():
    assert _break_ns(rows(utc_s=1000, open_s=50, close_s=52), 900 * S) == 0


def test_a_run_without_a_visit_begins_at_nought():
    assert _break_ns(None, 900 * S) == 0
