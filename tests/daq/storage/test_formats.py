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
        0.0013381828979837425,
        0.0012569386453932566,
        "0427fea932d35a28d6df5b833c3db08b1cdce110c2fad179d5b571c3decfca1f",
        "ada4afdee8f95e8ef5448c879e1d41e745b62e972a62cd97eb0ded745c82673d",
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
