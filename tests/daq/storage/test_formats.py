"""One finished run of every version of the archive's format, kept as it was written."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from daq.estimate.dataset import estimate_run
from daq.storage.digest import digest, gate_digest
from daq.storage.reader import open_visits, read_meta
from daq.storage.verify import verify

KEPT = Path(__file__).parent / "formats"
# Kappa, its error and the digests when the run was written; DEVELOPERS.md has an entry if they ever move.
RUNS = {
    1: (
        0.000568087400617772,
        0.0006103528726126086,
        "2173a54705c3ed213b59bc1589dc953fcbae5f08a71bcc34bcc4c06360f33a38",
        "37c03f92d240fa33bd8362273555fc3b9ab9fdfaf7c423ff5c9d55a9ae3ebc30",
    )
}


@pytest.mark.parametrize("version", RUNS)
def test_a_run_of_every_format_reads_as_it_did(version: int, tmp_path: Path) -> None:
    kappa, kappa_se, visits, gates = RUNS[version]
    shutil.unpack_archive(KEPT / f"{version}.zip", tmp_path / "run")

    dataset = open_visits(tmp_path / "run")
    estimate = estimate_run(dataset)

    assert read_meta(tmp_path / "run")["format"] == version
    assert verify(tmp_path / "run").problems == ()
    assert (digest(dataset), gate_digest(dataset)) == (visits, gates)
    assert estimate.kappa == pytest.approx(kappa, rel=0, abs=1e-12)
    assert estimate.kappa_se == pytest.approx(kappa_se, rel=0, abs=1e-12)
