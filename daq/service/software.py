"""Software: what a run was made with, so that it can be made again."""

from __future__ import annotations

import os
import platform
import subprocess
import sys
from collections.abc import Mapping
from functools import lru_cache
from importlib.metadata import distributions, version
from pathlib import Path
from typing import Any

# Named one by one: whatever else stands in the environment may be a secret.
ENVIRONMENT = (
    *("TZ", "LANG", "LC_ALL", "PYTHONHASHSEED", "PYTHONOPTIMIZE"),
    *("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"),
)
SOURCE = Path(__file__).parents[2]
GIT_S = 5.0


def software(environment: Mapping[str, str] = os.environ) -> dict[str, Any]:
    """Return program, commit, Python, machine, packages, command line, and part of the environment."""
    return {
        "name": "tercet",
        "version": version("tercet"),
        **commit(SOURCE),
        "python": platform.python_version(),
        "system": platform.system(),
        "release": platform.release(),
        "machine": platform.machine(),
        "processor": platform.processor() or platform.machine(),
        "cores": os.cpu_count(),
        "packages": _packages(),
        "command": sys.argv[1:],
        "environment": {name: environment[name] for name in ENVIRONMENT if name in environment},
    }


def commit(source: Path) -> dict[str, Any]:
    """Return the commit of a source tree and whether files differ from it; None where that is not known."""
    unknown: dict[str, Any] = {"commit": None, "changed": None}
    if not (source / ".git").exists():
        return unknown  # an installed package: its version says what it is
    words = ("git", "-C", str(source), "describe", "--always", "--dirty", "--abbrev=40", "--exclude", "*")
    try:
        told = subprocess.run(words, capture_output=True, text=True, timeout=GIT_S, check=True).stdout.strip()
    except (OSError, subprocess.SubprocessError):
        return unknown
    return {"commit": told.removesuffix("-dirty"), "changed": told.endswith("-dirty")}


@lru_cache(maxsize=1)
def _packages() -> dict[str, str]:
    return dict(sorted((one.name, one.version) for one in distributions()))
