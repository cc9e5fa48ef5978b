"""The system calls of a commit, seen from outside: a reading is on the disk before its row is given."""

from __future__ import annotations

import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

PROGRAM = """
import os, sys
from pathlib import Path
from tests.daq.storage.example import reading, started
with started(Path(sys.argv[1])) as archive:
    os.write(1, b"begin")
    for visit in range(20):
        os.write(1, b"row %d" % archive.commit(reading(visit)))
    os.write(1, b"end")
"""


@pytest.mark.skipif(shutil.which("strace") is None, reason="needs strace")
def test_every_row_number_follows_a_write_and_a_sync_of_the_log(tmp_path: Path) -> None:
    calls = tmp_path / "calls"
    trace = ["strace", "-f", "-y", "-o", str(calls), "-e", "trace=write,pwrite64,fdatasync,fsync"]
    root = Path(__file__).parents[3]
    done = subprocess.run(
        [*trace, sys.executable, "-c", PROGRAM, str(tmp_path / "run")],
        cwd=root,
        capture_output=True,
        check=False,
    )
    if b"ptrace" in done.stderr:
        pytest.skip(f"strace may not trace here: {done.stderr.decode()}")
    assert done.returncode == 0, done.stderr

    order = "".join(_letter(line) for line in calls.read_text().splitlines())

    committing = order[order.index("B") : order.index("E")]
    assert re.fullmatch(r"B((w+s)+A){20}", committing), committing


def _letter(line: str) -> str:
    if ', "row ' in line:
        return "A"
    if ', "begin"' in line or ', "end"' in line:
        return "B" if "begin" in line else "E"
    if "-wal>" in line:
        return "s" if "sync(" in line else "w"
    return ""
