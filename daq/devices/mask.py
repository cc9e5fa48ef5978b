"""Mask: a translator with separate openings on one stage."""

from __future__ import annotations

from collections.abc import Mapping

from daq.description.rig import Rig
from daq.ports import AxisState, Stage


class MaskTranslator:
    """A mask whose openings stand side by side on one axis."""

    def __init__(self, rig: Rig, stage: Stage) -> None:
        self._rig, self._stage = rig, stage

    def show(self, opening: int) -> float:
        """Start showing an opening (bit mask) and return how long it will take [s]."""
        return self._stage.start(self._rig.mask_at_mm(opening))

    def state(self) -> Mapping[str, AxisState]:
        """Return the state of the mask's axis by its name."""
        return {self._rig.mask.axis: self._stage.state()}

    def target_mm(self, opening: int) -> Mapping[str, float]:
        """Return where the mask's axis stands when an opening is shown."""
        return {self._rig.mask.axis: self._rig.mask_at_mm(opening)}

    def stop_now(self) -> None:
        """Stop the mask's axis, from any thread."""
        self._stage.stop_now()
