"""Draws of the project's own studies, obtained as `tercet study` obtains any."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from daq.estimate.arrays import FloatArray
from daq.scale.job import job_of
from daq.scale.study import Runner, carry_out, draws_of, here
from tests.studies.bench import SEED

BLOCK = 5


def drawn(
    kernel: str, draws: int, parameters: Mapping[str, Any], runner: Runner = here
) -> dict[str, FloatArray]:
    """Return every row of a kernel of this package by column."""
    job = job_of(f"tests.studies.{kernel}", parameters, SEED, draws)
    with tempfile.TemporaryDirectory() as folder:
        found = carry_out(job, Path(folder), BLOCK, runner)
        if found.failed:
            raise RuntimeError(found.failed[0].why)
        return {name: column.ravel() for name, column in draws_of(job, Path(folder)).items()}
