"""Workers of dask.distributed: the same bits as one process, whatever dies."""

from __future__ import annotations

import hashlib
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from daq.errors import DaqError
from daq.scale.cluster import Cluster
from daq.scale.job import Job, drawn, job_of
from daq.scale.study import carry_out, here
from tests.daq.scale.outside import ROOT, Outside, free_address

KERNELS = "tests.daq.scale.kernels"


def job(kernel: str = "normal", draws: int = 400, **parameters: Any) -> Job:
    return job_of(f"{KERNELS}:{kernel}", parameters, 7, draws)


def least(draws: int) -> float:
    """Return what only the least number of so many draws is below."""
    of = job("raises", draws=draws, below=0.0)
    return float(np.frombuffer(drawn(of, 0, draws)).min()) * (1 + 1e-9)


def serial(of: Job) -> str:
    return hashlib.sha256(drawn(of, 0, of.draws)).hexdigest()


@pytest.fixture
def outside(tmp_path: Path) -> Iterator[Outside]:
    one = Outside(tmp_path)
    yield one
    one.close()


def test_workers_draw_the_bits_of_one_process_and_a_deadly_block_is_named(tmp_path: Path) -> None:
    of = job("kills", draws=60, below=least(60), client=os.getpid())
    with Cluster(2) as cluster:
        whole = carry_out(job(), tmp_path / "whole", 7, cluster)
        some = carry_out(of, tmp_path / "some", 10, cluster)
        raised = carry_out(job("raises", draws=60, below=0.05), tmp_path / "raised", 5, cluster)

    assert whole.digest == serial(job())
    assert [one.why for one in some.failed] == ["killed: every worker that tried it died"]
    assert some.done == 50
    assert raised.failed and all("ArithmeticError" in one.why for one in raised.failed)


def test_a_scheduler_by_address_and_workers_killed_change_no_bit(outside: Outside, tmp_path: Path) -> None:
    of = job("waits", draws=60, wait_s=0.02)
    killed: list[int] = []

    def kill_one(done: int) -> None:
        if done >= 10 and not killed:
            killed.append(done)
            outside.kill_worker()

    with Cluster(address=outside.address) as cluster:
        found = carry_out(of, tmp_path / "study", 2, cluster, kill_one)

    assert killed
    assert found.digest == serial(of)


def test_a_scheduler_that_is_killed_is_said_and_the_study_goes_on_with_another(tmp_path: Path) -> None:
    of = job("waits", draws=80, wait_s=0.02)
    first = Outside(tmp_path / "first")

    def kill(done: int) -> None:
        if done >= 10:
            first.kill_scheduler()

    with pytest.raises(DaqError, match="scheduler has gone"), Cluster(address=first.address) as cluster:
        carry_out(of, tmp_path / "study", 2, cluster, kill)
    first.close()
    with Cluster(1) as cluster:
        seen: list[int] = []
        found = carry_out(of, tmp_path / "study", 3, cluster, seen.append)

    assert 10 <= seen[0] < 80
    assert found.digest == serial(of)


CLIENT = """
import sys
from pathlib import Path
from daq.scale.cluster import Cluster
from daq.scale.job import job_of
from daq.scale.study import carry_out

if __name__ == "__main__":
    of = job_of("tests.daq.scale.kernels:waits", {"wait_s": 0.02}, 7, 80)
    with Cluster(1) as cluster:
        carry_out(of, Path(sys.argv[1]), 2, cluster, lambda done: print(done, flush=True))
"""


def test_a_client_that_is_killed_leaves_what_is_drawn(tmp_path: Path) -> None:
    (tmp_path / "client.py").write_text(CLIENT)
    command = [sys.executable, str(tmp_path / "client.py"), str(tmp_path / "study")]
    client = subprocess.Popen(
        command, env=os.environ | {"PYTHONPATH": str(ROOT)}, stdout=subprocess.PIPE, text=True
    )
    assert client.stdout is not None
    for line in client.stdout:
        if int(line) >= 10:
            break
    client.send_signal(signal.SIGKILL)
    client.wait()
    of, seen = job("waits", draws=80, wait_s=0.02), list[int]()

    found = carry_out(of, tmp_path / "study", 80, here, seen.append)

    assert 10 <= seen[0] < 80
    assert found.digest == serial(of)


def test_an_address_that_nobody_answers_is_said() -> None:
    began_s = time.monotonic()

    with pytest.raises(DaqError, match="no cluster with workers answers here"):
        Cluster(address=free_address(), answers_within_s=1.0)

    assert time.monotonic() - began_s < 10


def test_workers_of_another_version_are_refused_before_they_draw(tmp_path: Path) -> None:
    other = tmp_path / "other"
    shutil.copytree(ROOT / "daq", other / "daq", ignore=shutil.ignore_patterns("__pycache__"))
    (other / "daq" / "openings.py").open("a").write("\n# another version\n")
    outside = Outside(tmp_path / "outside", workers=1, path=other)
    try:
        with (
            pytest.raises(DaqError, match="1 of 1 workers have another version"),
            Cluster(address=outside.address) as cluster,
        ):
            carry_out(job(), tmp_path / "study", 50, cluster)
    finally:
        outside.close()


@pytest.mark.long
@pytest.mark.parametrize("workers", [1, 2, 3])
def test_twenty_thousand_nights_have_one_digest(tmp_path: Path, workers: int) -> None:
    of = job(draws=20_000)

    with Cluster(workers) as cluster:
        assert carry_out(of, tmp_path, 500, cluster).digest == serial(of)


@pytest.mark.long
def test_workers_that_wait_are_kept_busy(tmp_path: Path) -> None:
    """Blocks of half a second: nine tenths of the workers' time goes into blocks, on a quiet machine."""
    of = job("waits", draws=40, wait_s=0.5)
    with Cluster(2) as cluster:
        carry_out(job("waits", draws=4, wait_s=0.01), tmp_path / "warm", 1, cluster)
        began_s = time.monotonic()
        carry_out(of, tmp_path / "study", 1, cluster)
        took_s = time.monotonic() - began_s

    assert 40 * 0.5 / 2 / took_s >= 0.90
