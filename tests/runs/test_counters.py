"""Whole rehearsals of every kind of counter: channels, slices, bunched counts, heralded pairs, power."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr

from daq import estimate_run, open_visits
from daq.cli import main
from daq.cli.toml import toml_text
from daq.estimate import judged_again
from daq.estimate.account import account_of
from daq.records import Quality
from tests.examples import CONFIGS, changed, measurement_table, rig_table

SHORT: dict[str, Any] = {
    "rig": "rig.toml",
    "positions__number": 5,
    "itinerary__laps": 16,
    "itinerary__dwell_s": 1.0,
}
NO_DEAD_TIME = {"estimate__dead_time_s": 0.0, "estimate__dead_time_u_s": 0.0}
PAIRS = {"signal": 1, "idler": 2, "window_s": 2e-6}
HERALDING = 0.3


def rehearsed(tmp_path: Path, rig: dict[str, Any], measurement: dict[str, Any], *more: str) -> xr.Dataset:
    """Return the archive of a rehearsal in process."""
    (tmp_path / "rig.toml").write_text(toml_text(changed(rig_table(), **rig)))
    (tmp_path / "short.toml").write_text(toml_text(changed(measurement_table(), **SHORT | measurement)))
    words = [str(tmp_path / "short.toml"), "--link", "direct", "--into", str(tmp_path / "lab"), "--seed", "3"]
    assert main(["rehearse", *words, *more, "--json"]) == 0
    (folder,) = (tmp_path / "lab" / "runs").iterdir()
    visits: xr.Dataset = open_visits(folder)
    return visits


def off_truth(visits: xr.Dataset) -> float:
    """Return how many of its standard errors a residual is off the truth of its bench."""
    estimate = estimate_run(visits)
    assert estimate.kappa is not None and estimate.kappa_se is not None
    return float(abs(estimate.kappa - visits.attrs["truth_kappa"]) / estimate.kappa_se)


def pairs_counter() -> dict[str, Any]:
    """Return a counter of heralded pairs, most of its coincidences by chance."""
    return {
        "devices__counter__channels": 3,
        "bench__dead_time_s": 0.0,
        "bench__channels": [
            {"sees": "coincidence", "share": HERALDING, "window_s": 2e-6},
            {"sees": "detector"},
            {"sees": "monitor", "rate_hz": 2e5},
        ],
    }


def test_accidental_coincidences_are_taken_away_visit_by_visit(tmp_path: Path) -> None:
    visits = rehearsed(tmp_path, pairs_counter(), {"estimate__heralded": PAIRS, **NO_DEAD_TIME})

    estimate = estimate_run(visits)

    seen = visits["values"].values[:, 0].sum()
    singles = visits["values"].values[:, 1].sum()
    rates, errors = estimate.rates_hz, estimate.rates_se_hz
    left = np.nansum(rates) / (singles / visits["live_s"].values.sum() * rates.size)
    assert seen / singles > 1.5 * HERALDING  # what stands in the archive has the accidental ones
    assert left == pytest.approx(HERALDING, abs=4 * float(np.sqrt(np.sum(errors**2)) / rates.sum()))
    assert not visits["quality"].values.any()  # the rules know how accidental ones scatter
    assert off_truth(visits) < 4


def test_bunched_counts_scatter_as_they_were_said_to(tmp_path: Path) -> None:
    rig = {"bench__dead_time_s": 0.0, "bench__channels": [{"fano": 4.0}], "bench__source": {}}
    laps = {"positions__number": 3, "itinerary__laps": 40}

    visits = rehearsed(tmp_path, rig, {"estimate__fano": 4.0, **NO_DEAD_TIME, **laps})

    estimate = estimate_run(visits)
    assert estimate.excess is not None and estimate.dof == 19
    assert abs(estimate.excess - 1) < 4 / np.sqrt(2 * 19) < 1  # 2 if counts were taken for Poisson counts
    assert off_truth(visits) < 4


def test_the_monitor_is_used_where_the_source_flickers(tmp_path: Path) -> None:
    rig = {
        "devices__counter__channels": 2,
        "bench__channels": [{"sees": "detector"}, {"sees": "monitor", "rate_hz": 1e6}],
        "bench__source__random_walk_per_sqrt_hour": 0.5,
    }

    visits = rehearsed(tmp_path, rig, {"estimate__monitor_channel": 1})

    estimate = estimate_run(visits)
    assert estimate.estimator == "normalised to the monitor"
    assert estimate.excess is not None and estimate.excess < 2
    assert off_truth(visits) < 4


def test_power_readings_give_the_truth_with_the_bar_of_their_repeats(tmp_path: Path) -> None:
    meter = {
        "driver": "dialect",
        "dialect": str(CONFIGS / "dialects" / "scpi-power.toml"),
        "address": "tcp://127.0.0.1:7802",
    }
    rig = {
        "devices__counter": meter,
        "bench__instruments": {"counter": "scpi-power"},
        "bench__dead_time_s": 0.0,
        "bench__power": {"noise": 400.0, "readings_per_s": 20.0},
        "bench__source__random_walk_per_sqrt_hour": 0.0,
    }

    visits = rehearsed(tmp_path, rig, {"estimate__counting": "power", **NO_DEAD_TIME})

    estimate = estimate_run(visits)
    variances = visits["values_var"].values[:, 0]
    assert np.mean(variances) == pytest.approx(400.0**2 / 20, rel=0.1)
    assert set(visits["repeats"].values.tolist()) == {20}
    assert estimate.excess is not None and estimate.excess_se is not None
    assert abs(estimate.excess - 1) < 3 * estimate.excess_se
    assert off_truth(visits) < 4


def test_a_dead_time_left_over_is_told_and_moves_kappa_not_at_all(tmp_path: Path) -> None:
    rig = {"bench__dead_time_s": 240e-9, "bench__source__random_walk_per_sqrt_hour": 0.0}

    visits = rehearsed(tmp_path, rig, {"positions__number": 11})

    estimate = estimate_run(visits)
    assert estimate.dead_time_left_s is not None and estimate.dead_time_left_se_s is not None
    assert abs(estimate.dead_time_left_s - 200e-9) < 4 * estimate.dead_time_left_se_s < 100e-9
    assert off_truth(visits) < 4


def test_slices_show_a_beam_that_failed_within_a_visit_and_the_stand_is_repeated(tmp_path: Path) -> None:
    faults = {"seed": 1, "fault": [{"kind": "beam-off", "at_s": 600.3, "seconds": 0.4}]}
    (tmp_path / "faults.toml").write_text(toml_text(faults))

    visits = rehearsed(
        tmp_path, {"devices__counter__slices": 10}, {}, "--faults", str(tmp_path / "faults.toml")
    )

    assert visits["slices"].shape == (visits.sizes["row"], 10, 1)
    assert np.array_equal(visits["slices"].values.sum(axis=1), visits["values"].values)
    assert np.array_equal(judged_again(visits), visits["quality"].values)
    flagged = (visits["quality"].values & int(Quality.DISPERSION)) != 0
    again = visits["attempt"].values == 2
    assert flagged.sum() == 1 and again.sum() == 8
    assert set(visits["stand"].values[again]) == set(visits["stand"].values[flagged])
    assert account_of(visits).left_out == {}
