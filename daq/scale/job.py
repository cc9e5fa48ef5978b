"""The job of a study: what is drawn, how often, and the one function that workers carry out."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from importlib import import_module
from importlib.metadata import version
from importlib.util import find_spec
from pathlib import Path
from typing import Any

import numpy as np

from daq.errors import DescriptionError

Draw = Mapping[str, float | Sequence[float]]
Kernel = Callable[[Mapping[str, Any], np.random.Generator], Any]

KNOWN = {"synthetic": "daq.scale.synthetic:night", "rehearsed": "daq.scale.rehearsed:night"}
PACKAGES = ("daq", "simulators")


@dataclass(frozen=True, slots=True)
class Job:
    """So many draws of a kernel; `entropy` seeds them, each by its own number, `columns` by `rows` a draw.

    Without columns the kernel gives bytes, which are taken as they are.
    """

    kernel: str
    parameters: str  # JSON: the same text, the same draws
    entropy: int
    draws: int
    columns: tuple[str, ...]
    rows: int = 1

    @property
    def key(self) -> str:
        """A hash of everything that decides the numbers; neither how many nor how they are cut is in it."""
        said = (
            self.kernel,
            self.parameters,
            self.entropy,
            self.columns,
            self.rows,
            code_version(self.kernel),
        )
        return hashlib.sha256(json.dumps(said).encode()).hexdigest()

    @property
    def draw_bytes(self) -> int:
        """How many bytes one draw takes."""
        return 8 * self.rows * len(self.columns)


def job_of(kernel: str, parameters: Mapping[str, Any], entropy: int, draws: int) -> Job:
    """Return a job; its columns are told by its module (`COLUMNS`), or shown by its first draw."""
    name = KNOWN.get(kernel, kernel)
    text = json.dumps(dict(parameters), sort_keys=True)
    _kernel(name)
    told = getattr(import_module(name.partition(":")[0]), "COLUMNS", None)
    if told is not None:
        return Job(name, text, entropy, draws, tuple(told))
    first = _one(name, text, entropy, 0)
    rows = {len(np.atleast_1d(values)) for values in first.values()}
    if len(rows) != 1:
        raise DescriptionError((f"{kernel}: every column of a draw needs the same number of rows.",))
    return Job(name, text, entropy, draws, tuple(first), rows.pop())


def drawn(job: Job, first: int, count: int) -> bytes:
    """Return draws `first` to `first + count - 1` as float64, little-endian, draw by draw, row by row."""
    if not job.columns:
        numbers = range(first, first + count)
        return b"".join(_one(job.kernel, job.parameters, job.entropy, number) for number in numbers)
    table = np.empty((count, job.rows, len(job.columns)), "<f8")
    for place in range(count):
        found = _one(job.kernel, job.parameters, job.entropy, first + place)
        table[place] = np.column_stack([np.atleast_1d(found[name]) for name in job.columns])
    return table.tobytes()


@lru_cache(maxsize=16)
def code_version(kernel: str) -> str:
    """Return a hash of the program and of the kernel's own module: workers of another version differ."""
    return version("tercet") + code_of(*PACKAGES, kernel.partition(":")[0])


@lru_cache(maxsize=16)
def code_of(*names: str) -> str:
    """Return a hash of the sources of packages and modules."""
    whole = hashlib.sha256()
    for path in sorted({path for name in names for path in _sources(name)}):
        whole.update(path.name.encode() + path.read_bytes())
    return whole.hexdigest()[:16]


def _sources(name: str) -> list[Path]:
    found = find_spec(name)
    if found is None or found.origin is None:
        return []
    origin = Path(found.origin)
    return sorted(origin.parent.rglob("*.py")) if origin.name == "__init__.py" else [origin]


def _one(kernel: str, parameters: str, entropy: int, number: int) -> Any:
    seed = np.random.SeedSequence(entropy, spawn_key=(number,))
    generator = np.random.Generator(np.random.PCG64DXSM(seed))
    return _kernel(kernel)(json.loads(parameters), generator)


@lru_cache(maxsize=16)
def _kernel(name: str) -> Kernel:
    module, _, function = name.partition(":")
    try:
        found: Kernel = getattr(import_module(module), function)
    except (ImportError, AttributeError, ValueError) as error:
        known = ", ".join(KNOWN)
        raise DescriptionError(
            (f"kernel {name!r}: {error}. Name one of {known}, or a function as MODULE:FUNCTION.",)
        ) from error
    return found
