"""Rows of a study: the same from any runner, and one that fails is named."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from functools import partial

import pytest

from daq.scale.job import Job, drawn
from daq.scale.study import Block, Outcome
from tests.studies import pooled
from tests.studies.rows import rows


def backwards(of: Job, blocks: Iterable[Block]) -> Iterator[Outcome]:
    for block in reversed(list(blocks)):
        yield block, drawn(of, *block)


def test_a_study_is_the_same_in_whatever_order_its_rows_come_home() -> None:
    assert pooled.study(30, each=partial(rows, runner=backwards)) == pooled.study(30)


def test_a_row_that_cannot_be_drawn_is_named() -> None:
    with pytest.raises(RuntimeError, match="pooled:row, no night"):
        rows("pooled:row", {"no night": [0, 0.0, 30]})
