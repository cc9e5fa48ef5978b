"""Kernels for tests: cheap ones, one that raises, one that kills its worker, one that waits."""

from __future__ import annotations

import os
import time
from collections.abc import Mapping
from typing import Any

import numpy as np


def normal(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, float]:
    """Return a normal number and its square."""
    value = float(generator.normal(parameters.get("mean", 0.0)))
    return {"value": value, "square": value**2}


def several(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, Any]:
    """Return three rows a draw."""
    return {"value": generator.normal(size=3), "place": [0.0, 1.0, 2.0]}


def raises(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, float]:
    """Raise for one number in a thousand or so, never for the first."""
    value = float(generator.random())
    if value < parameters["below"]:
        raise ArithmeticError("no such night")
    return {"value": value}


def kills(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, float]:
    """Kill the process that draws such a number, unless that is the client's."""
    value = float(generator.random())
    if value < parameters["below"] and os.getpid() != parameters["client"]:
        os._exit(9)
    return {"value": value}


def waits(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, float]:
    """Wait, as a night that needs so long would."""
    time.sleep(parameters["wait_s"])
    return {"value": float(generator.random())}
