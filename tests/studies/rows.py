"""Rows of the project's own studies, each drawn as a block of `tercet study` is: here, or by workers."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Mapping, Sequence
from importlib import import_module
from typing import Any

import numpy as np

from daq.scale.job import Job
from daq.scale.study import Failed, Runner, here
from tests.studies.bench import SEED

Each = Callable[[str, Mapping[str, Sequence[Any]]], dict[str, Any]]


def rows(function: str, wanted: Mapping[str, Sequence[Any]], runner: Runner = here) -> dict[str, Any]:
    """Return what a function of this package ("zigzag:row") gives for the arguments of every row, by row.

    A row draws with a generator of its own name, so that it is the same wherever it is drawn.
    """
    told = json.dumps({"function": function, "arguments": list(wanted.values())})
    job = Job("tests.studies.rows:row", told, SEED, len(wanted), ())
    names, found = list(wanted), dict[str, Any]()
    for outcome in runner(job, ((at, 1) for at in range(len(names)))):
        if isinstance(outcome, Failed):
            raise RuntimeError(f"{function}, {names[outcome.first]}: {outcome.why}")
        (first, _), data = outcome
        found[names[first]] = json.loads(data)
        print(f"{function}: {len(found)} of {len(names)} ({names[first]})", file=sys.stderr, flush=True)
    return {name: found[name] for name in names}


def row(parameters: Mapping[str, Any], generator: np.random.Generator) -> bytes:
    """Return the row whose number this draw has, as JSON; its generator is not this one."""
    number = generator.bit_generator.seed_seq.spawn_key[-1]  # type: ignore[attr-defined]
    module, _, name = parameters["function"].partition(":")
    found = getattr(import_module(f"tests.studies.{module}"), name)(*parameters["arguments"][number])
    return json.dumps(found).encode()
