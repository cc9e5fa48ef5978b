"""What is planned is what is performed: pauses are waited for, and gates open when the plan says."""

import numpy as np
import pytest

import daq
from daq.cli import main
from daq.records import Visit
from daq.sequencer import perform
from daq.service.load import load
from simulators.clock import VirtualClock
from tests.daq.itinerary.test_command import changed_file
from tests.standins import MemoryBench


def test_a_pause_is_waited_for_besides_the_moves():
    bench = MemoryBench(VirtualClock(origin_utc_ns=0))
    visits = [(Visit(0, 1, 0.0, 2.0), 1, 0), (Visit(1, 3, 0.0, 2.0, pause_s=7.5), 1, 0)]

    first, second = (reading for _, reading in perform(visits, bench.devices, bench.sink, bench.clock))

    assert (second.gate_open_ns - first.gate_close_ns) / 1e9 == pytest.approx(bench.mask_move_s + 7.5)


def test_a_rehearsal_of_words_nested_positions_flown_back_laps_take_up_and_pauses_keeps_the_planned_times(
    tmp_path, capsys
):
    file = changed_file(
        tmp_path,
        ("number = 41 ", "number = 4 "),
        ("laps = 38", "laps = 4"),
        ('order = "zigzag"', 'order = "searched"'),
        ("repeats = 1", "repeats = 2"),
        ("together = 1", "together = 2"),
        ("fly_back = false", "fly_back = true"),
        ('dwell = "equal"', 'dwell = "best"'),
        ("drift_per_sqrt_hour = 0.01", "drift_per_sqrt_hour = 0.3"),
        ("# lines = [{ period_s = 900, period_u_s = 5,", "lines = [{ period_s = 110, period_u_s = 110,"),
    )
    rig = tmp_path / "rigs" / "lantern.toml"
    rig.write_text(rig.read_text().replace("# approach", "approach", 1).replace("# takeup_s", "takeup_s", 1))
    planned = load(file).itinerary()

    status = main(["rehearse", str(file), "--link", "direct", "--into", str(tmp_path / "lab"), "--json"])

    assert status == 0
    (folder,) = (tmp_path / "lab" / "runs").iterdir()
    visits = daq.open_visits(folder)
    estimate = daq.estimate_run(visits)
    performed_s = visits["gate_open_ns"].values / 1e9
    assert planned.pauses
    assert planned.visits_per_stand > 8
    # from the second gate on: the first one waits for the move from where the axes were found
    late_s = performed_s[1:] - performed_s[1] - (planned.start_s[1:] - planned.start_s[1])
    assert np.abs(late_s).max() < 0.02
    assert (visits["use"].values == 1).all()
    assert estimate.pairs == 2
    assert estimate.visits == len(planned)


def test_a_pause_is_cut_short_for_somebody_who_waits():
    bench = MemoryBench(VirtualClock(origin_utc_ns=0))
    visits = [(Visit(0, 1, 0.0, 2.0), 1, 0), (Visit(1, 3, 0.0, 2.0, pause_s=600.0), 1, 0)]
    patience = iter([True, True, False])

    performed = perform(visits, bench.devices, bench.sink, bench.clock, patient=lambda: next(patience, False))
    first, second = (reading for _, reading in performed)

    assert (second.gate_open_ns - first.gate_close_ns) / 1e9 == pytest.approx(bench.mask_move_s + 2.0)
