"""What every mask promises."""

from __future__ import annotations

import pytest

from daq.ports import Devices, Mask
from simulators.bench import WaveletBench
from tests.examples import lantern_rig


@pytest.fixture
def mask(devices: Devices) -> Mask:
    for stage in devices.stages:
        stage.home()
    return devices.mask


class TestMask:
    """The promises of `daq.ports.Mask`."""

    def test_it_shows_every_opening_within_the_time_of_the_matrix(
        self, mask: Mask, bench: WaveletBench
    ) -> None:
        rig, here = lantern_rig(), 0
        bench.clock.sleep_until(bench.clock.now_ns() + round(mask.show(here) * 1e9))
        for opening in (*rig.opening_masks, 1, 7, 0):
            predicted_s = mask.show(opening)

            assert predicted_s == pytest.approx(rig.mask_move_s()[here, opening])
            bench.clock.sleep_until(bench.clock.now_ns() + round(predicted_s * 1e9))
            state, target_mm = mask.state(), mask.target_mm(opening)
            assert {axis: (place.encoder_mm, place.moving) for axis, place in state.items()} == {
                axis: (place_mm, False) for axis, place_mm in target_mm.items()
            }
            here = opening

    def test_a_stop_stops_every_axis_of_it(self, mask: Mask, bench: WaveletBench) -> None:
        mask.show(0)
        bench.clock.sleep_until(bench.clock.now_ns() + 100_000_000)

        mask.stop_now()

        assert not any(place.moving for place in mask.state().values())
        assert mask.state()["mask"].encoder_mm < mask.target_mm(0)["mask"]
