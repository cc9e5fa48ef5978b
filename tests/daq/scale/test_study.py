from __future__ import annotations

import hashlib
import json
import os
import subprocess
import sys
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from daq.errors import DaqError, DescriptionError, StorageError
from daq.scale.job import Job, drawn, job_of
from daq.scale.ledger import DONE, DRAWS
from daq.scale.study import Block, Outcome, carry_out, draws_of, here

KERNELS = "tests.daq.scale.kernels"


def job(kernel: str = "normal", draws: int = 100, entropy: int = 7, **parameters: Any) -> Job:
    return job_of(f"{KERNELS}:{kernel}", parameters, entropy, draws)


def test_a_draw_is_that_of_its_own_number_and_of_no_other(tmp_path: Path) -> None:
    seed = np.random.SeedSequence(7).spawn(100)[42]

    value = np.random.Generator(np.random.PCG64DXSM(seed)).normal(0.0)

    carry_out(job(), tmp_path, 10, here)
    assert draws_of(job(), tmp_path)["value"][42, 0] == value


@pytest.mark.parametrize("block", [1, 7, 100, 1000])
def test_the_size_of_a_block_changes_no_bit(tmp_path: Path, block: int) -> None:
    found = carry_out(job(), tmp_path, block, here)

    assert found.digest == hashlib.sha256(drawn(job(), 0, 100)).hexdigest()


def backwards(of: Job, blocks: Iterable[Block]) -> Iterator[Outcome]:
    for block in reversed(list(blocks)):
        yield block, drawn(of, *block)


def test_the_order_of_arrival_changes_no_bit(tmp_path: Path) -> None:
    one = carry_out(job(), tmp_path / "one", 7, here)
    two = carry_out(job(), tmp_path / "two", 7, backwards)

    assert one == two


class DiesError(Exception):
    """What ends a start in the middle."""


def dying(after: int) -> Any:
    def runner(of: Job, blocks: Iterable[Block]) -> Iterator[Outcome]:
        for number, outcome in enumerate(here(of, blocks)):
            if number == after:
                raise DiesError
            yield outcome

    return runner


def test_a_study_goes_on_where_it_was_with_blocks_of_another_size(tmp_path: Path) -> None:
    with pytest.raises(DiesError):
        carry_out(job(), tmp_path, 9, dying(4))
    asked: list[Block] = []

    def noting(of: Job, blocks: Iterable[Block]) -> Iterator[Outcome]:
        asked.extend(all_of := list(blocks))
        return here(of, all_of)

    found = carry_out(job(), tmp_path, 20, noting)

    assert sum(count for _, count in asked) == 100 - 36
    assert found == carry_out(job(), tmp_path / "whole", 100, here)


def test_a_finished_study_draws_nothing_and_says_the_same(tmp_path: Path) -> None:
    first = carry_out(job(), tmp_path, 10, here)

    again = carry_out(job(), tmp_path, 10, here)

    assert again == first
    assert len((tmp_path / DONE).read_text().splitlines()) == 11


def test_more_draws_are_added_to_those_there_are(tmp_path: Path) -> None:
    carry_out(job(draws=30), tmp_path, 10, here)

    carry_out(job(draws=100), tmp_path, 10, here)

    assert (tmp_path / DRAWS).read_bytes() == drawn(job(), 0, 100)


@pytest.mark.parametrize("tear", [b'{"first": 90', b"\x00\xff"])
def test_a_line_that_a_crash_tore_is_drawn_again(tmp_path: Path, tear: bytes) -> None:
    carry_out(job(), tmp_path, 10, here)
    lines = (tmp_path / DONE).read_bytes().splitlines(keepends=True)
    (tmp_path / DONE).write_bytes(b"".join(lines[:-1]) + tear)

    found = carry_out(job(), tmp_path, 10, here)

    assert found.digest == hashlib.sha256(drawn(job(), 0, 100)).hexdigest()


def test_damaged_draws_are_drawn_again(tmp_path: Path) -> None:
    whole = carry_out(job(), tmp_path, 10, here)
    data = bytearray((tmp_path / DRAWS).read_bytes())
    data[500] ^= 1
    (tmp_path / DRAWS).write_bytes(data)

    assert carry_out(job(), tmp_path, 10, here) == whole


@pytest.mark.parametrize("other", [job(entropy=8), job(mean=1.0), job("several")])
def test_a_folder_of_another_study_is_refused_and_left_alone(tmp_path: Path, other: Job) -> None:
    carry_out(job(), tmp_path, 10, here)
    before = [(tmp_path / name).read_bytes() for name in (DRAWS, DONE)]

    with pytest.raises(StorageError, match="holds another study"):
        carry_out(other, tmp_path, 10, here)

    assert [(tmp_path / name).read_bytes() for name in (DRAWS, DONE)] == before


def test_a_start_that_drew_nothing_leaves_the_folder_to_any_study(tmp_path: Path) -> None:
    with pytest.raises(DiesError):
        carry_out(job(), tmp_path, 10, dying(0))

    found = carry_out(job(entropy=8), tmp_path, 10, here)

    assert found.digest == hashlib.sha256(drawn(job(entropy=8), 0, 100)).hexdigest()


def test_a_block_that_fails_is_named_and_the_others_go_on(tmp_path: Path) -> None:
    of = job("raises", draws=200, below=0.02)

    found = carry_out(of, tmp_path, 10, here)

    assert found.failed and found.digest is None
    assert found.done == 200 - 10 * len(found.failed)
    assert all("ArithmeticError: no such night" in one.why for one in found.failed)
    with pytest.raises(DaqError, match="of 200 draws are done"):
        draws_of(of, tmp_path)


def test_figures_are_those_of_all_rows(tmp_path: Path) -> None:
    of = job("several", draws=50)

    found = carry_out(of, tmp_path, 8, here)

    values = draws_of(of, tmp_path)["value"]
    assert values.shape == (50, 3)
    column = found.figures["value"]
    assert column["number"] == 150
    assert column["mean"] == pytest.approx(values.mean(), abs=1e-15)
    assert column["sd"] == pytest.approx(values.std(ddof=1), rel=1e-14)
    assert (column["least"], column["most"]) == (values.min(), values.max())


def test_progress_is_told_from_what_is_there_to_the_end(tmp_path: Path) -> None:
    told: list[int] = []

    carry_out(job(), tmp_path, 40, here, told.append)

    assert told == [0, 40, 80, 100]


@pytest.mark.parametrize("kernel", ["nowhere:night", "tests.daq.scale.kernels:none", "no colon"])
def test_a_kernel_that_is_not_there_is_refused(kernel: str) -> None:
    with pytest.raises(DescriptionError, match="Name one of synthetic, rehearsed"):
        job_of(kernel, {}, 1, 1)


def test_the_key_holds_whatever_decides_the_numbers() -> None:
    keys = {one.key for one in (job(), job(entropy=8), job(mean=1.0), job("several"))}

    assert len(keys) == 4
    assert job(draws=5).key == job().key
    assert json.loads(job(mean=1.0).parameters) == {"mean": 1.0}


def test_a_process_that_draws_sums_with_one_thread_whatever_the_machine() -> None:
    """Sums of BLAS differ in their last bit by its number of threads, which it takes when it is loaded."""
    told = "import os, sys, daq.scale; print('numpy' in sys.modules, os.environ['OMP_NUM_THREADS'])"
    clean = {name: value for name, value in os.environ.items() if name != "OMP_NUM_THREADS"}

    found = subprocess.run(
        [sys.executable, "-c", told], env=clean, capture_output=True, text=True, check=True
    )

    assert found.stdout.split() == ["False", "1"]
