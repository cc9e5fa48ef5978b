"""Speed of rehearsals: the reference night and a slow one, over TCP and in process, beside a durable write.

python -m tests.benchmarks.bench_rehearsal
"""

from __future__ import annotations

import contextlib
import io
import json
import tempfile
from pathlib import Path

from daq.cli import main
from tests.examples import CONFIGS

SLOW = (("number = 41", "number = 11"), ("dwell_s = 2.2", "dwell_s = 10.0"), ("laps = 38", "laps = 36"))


def slow_night(folder: Path) -> Path:
    """Return a measurement of about ten hours with a dwell of 10 s at 11 positions."""
    text = (CONFIGS / "lantern.toml").read_text()
    for old, new in SLOW:
        text = text.replace(old, new)
    (folder / "rigs").mkdir()
    (folder / "rigs" / "lantern.toml").write_text((CONFIGS / "rigs" / "lantern.toml").read_text())
    (folder / "slow.toml").write_text(text)
    return folder / "slow.toml"


def rehearsed(file: Path, link: str, lab: Path) -> dict[str, float]:
    """Return the figures of one rehearsal."""
    out = io.StringIO()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(io.StringIO()):
        main(["rehearse", str(file), "--link", link, "--into", str(lab), "--json"])
    figures: dict[str, float] = json.loads(out.getvalue())
    return figures


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as folder:
        nights = {"reference night": CONFIGS / "lantern.toml", "dwell 10 s": slow_night(Path(folder))}
        for name, file in nights.items():
            for link in ("direct", "tcp"):
                found = rehearsed(file, link, Path(folder) / "lab")
                print(
                    f"{name:16} {link:7} {found['visits']:6} visits, {found['run_s'] / 3600:5.2f} h in "
                    f"{found['run_s'] / found['speed_up']:6.1f} s: speed-up {found['speed_up']:7.0f}; "
                    f"durable write {1e3 * found['durable_write_s']:.2f} ms"
                )
