"""What every stage promises."""

from __future__ import annotations

import math

import pytest

from daq.errors import DeviceError
from daq.ports import Clock, Devices, Stage
from simulators.bench import WaveletBench
from tests.examples import lantern_rig

S = 1_000_000_000


@pytest.fixture(params=list(lantern_rig().axes))
def stage(request: pytest.FixtureRequest, devices: Devices) -> Stage:
    return {stage.name: stage for stage in devices.stages}[request.param]


@pytest.fixture
def homed(stage: Stage) -> Stage:
    stage.home()
    return stage


@pytest.fixture
def clock(bench: WaveletBench) -> Clock:
    return bench.clock


def wait(clock: Clock, seconds: float) -> None:
    clock.sleep_until(clock.now_ns() + round(seconds * S))


class TestStage:
    """The promises of `daq.ports.Stage`."""

    def test_it_is_lost_until_it_has_been_homed(self, stage: Stage) -> None:
        before = stage.state()

        stage.home()

        after = stage.state()
        assert (before.homed, after.homed, after.moving, after.alarm) == (False, True, False, "")
        assert after.encoder_mm == after.position_mm

    def test_a_move_before_homing_is_refused(self, stage: Stage) -> None:
        with pytest.raises(DeviceError) as refusal:
            stage.start(5.0)

        assert refusal.value.kind == "refused"
        assert not stage.state().moving

    def test_a_move_takes_no_longer_than_predicted_and_ends_at_its_target(
        self, homed: Stage, clock: Clock
    ) -> None:
        tolerance_mm = lantern_rig().axes[homed.name].tolerance_mm

        predicted_s = homed.start(5.4321)

        assert homed.state().moving and homed.state().position_mm == 5.4321
        wait(clock, predicted_s)
        state = homed.state()
        assert not state.moving
        assert abs(state.encoder_mm - 5.4321) <= tolerance_mm

    def test_the_prediction_is_settling_and_distance_over_speed(self, homed: Stage, clock: Clock) -> None:
        axis = lantern_rig().axes[homed.name]
        wait(clock, homed.start(3.0))

        predictions_s = [homed.start(3.0), homed.start(7.0)]

        assert predictions_s == pytest.approx([0.0, axis.settle_s + 4.0 / axis.speed_mm_s])

    @pytest.mark.parametrize("target_mm", [math.nan, math.inf, -math.inf, 20.001, -15.001, 1e300])
    def test_a_target_outside_the_limits_is_refused_and_nothing_moves(
        self, homed: Stage, target_mm: float
    ) -> None:
        before = homed.state()

        with pytest.raises(DeviceError, match="not sent") as refusal:
            homed.start(target_mm)

        assert refusal.value.kind == "refused"
        assert homed.state() == before

    def test_every_place_within_the_limits_can_be_reached(self, homed: Stage, clock: Clock) -> None:
        for limit_mm in homed.limits_mm:
            wait(clock, homed.start(limit_mm))

            assert homed.state().encoder_mm == limit_mm

    def test_a_stop_holds_it_where_it_is_and_it_stays_homed(self, homed: Stage, clock: Clock) -> None:
        predicted_s = homed.start(homed.limits_mm[1])
        wait(clock, 0.1)

        homed.stop_now()

        wait(clock, predicted_s)
        state = homed.state()
        assert (state.moving, state.homed) == (False, True)
        assert state.encoder_mm < homed.limits_mm[1] - 1

    def test_after_a_stop_it_moves_again_and_predicts_from_where_it_is(
        self, homed: Stage, clock: Clock
    ) -> None:
        homed.start(homed.limits_mm[1])
        wait(clock, 0.1)
        homed.stop_now()
        here_mm = homed.state().encoder_mm

        predicted_s = homed.start(2.0)

        axis = lantern_rig().axes[homed.name]
        assert predicted_s == pytest.approx(axis.move_s(2.0 - here_mm))
        wait(clock, predicted_s)
        assert homed.state().encoder_mm == 2.0
