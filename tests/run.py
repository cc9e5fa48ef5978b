"""Set up the test environment and run all tests, the browser's too: `python3 tests/run.py [arguments]`.

Arguments go to pytest. Standard library only. Makes `.venv` beside the project, installs it with its test
tools at the pinned versions, finds Chromium (installs it when run as root on Debian), and runs pytest. A
second run skips what is done.
"""

from __future__ import annotations

import hashlib
import os
import shutil
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
VENV = Path(os.environ.get("TERCET_VENV", ROOT / ".venv"))
CONSTRAINTS = ROOT / ".ci" / "constraints.txt"
STAMP = VENV / "tercet-installed"
BROWSERS = ("chromium", "chromium-browser", "google-chrome", "chrome")
EXTRAS = ".[test,judges]"


def main(arguments: list[str]) -> int:
    """Return pytest's exit status, or 1 with a sentence."""
    if sys.version_info < (3, 11):
        return _refuse("this needs Python 3.11 or newer; run it with python3.11")
    python = VENV / ("Scripts/python.exe" if os.name == "nt" else "bin/python")
    if not _environment(python):
        return 1
    _browser()
    chosen = arguments or ["-m", "not long", "-n", "2"]
    return subprocess.run([python, "-m", "pytest", *chosen], cwd=ROOT, check=False).returncode


def _environment(python: Path) -> bool:
    wanted = hashlib.sha256((ROOT / "pyproject.toml").read_bytes() + CONSTRAINTS.read_bytes()).hexdigest()
    if STAMP.exists() and STAMP.read_text() == wanted:
        return True
    if subprocess.run([sys.executable, "-m", "venv", VENV], check=False).returncode:
        _refuse("this Python cannot make a virtual environment; on Debian: apt-get install python3-venv")
        return False
    words = ("-m", "pip", "install", "--quiet", "--disable-pip-version-check", "-c", CONSTRAINTS)
    if subprocess.run([python, *words, "--editable", EXTRAS], cwd=ROOT, check=False).returncode:
        _refuse("pip could not install the project; its words stand above")
        return False
    STAMP.write_text(wanted)
    return True


def _browser() -> None:
    """Name a Chromium for the browser tests; they fail with a remedy when there is none."""
    found = os.environ.get("TERCET_CHROMIUM") or next(filter(None, map(shutil.which, BROWSERS)), None)
    if found is None and hasattr(os, "geteuid") and os.geteuid() == 0 and shutil.which("apt-get"):
        print("installing chromium for the browser tests", flush=True)
        subprocess.run(["apt-get", "update", "-qq"], check=False)
        packages = ["chromium", "fonts-dejavu-core"]
        subprocess.run(
            ["apt-get", "install", "-y", "-qq", "--no-install-recommends", *packages],
            check=False,
            stdout=subprocess.DEVNULL,
        )
        found = shutil.which("chromium")
    if found:
        os.environ["TERCET_CHROMIUM"] = found


def _refuse(text: str) -> int:
    print(f"tests/run.py: {text}", file=sys.stderr)
    return 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
