"""Descriptions: a table read from TOML becomes a frozen model, or a list of everything wrong with it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Literal, overload

from pydantic import ValidationError

from daq.description.dialect import Dialect
from daq.description.foreign import ForeignTable
from daq.description.joint import joint_problems
from daq.description.measurement import Measurement
from daq.description.problems import every_problem
from daq.description.rig import Rig
from daq.errors import DescriptionError

__all__ = ["Dialect", "ForeignTable", "Measurement", "Rig", "joint_problems", "parse"]

_MODELS: Mapping[str, type[Measurement] | type[Rig] | type[Dialect] | type[ForeignTable]] = {
    "measurement": Measurement,
    "rig": Rig,
    "dialect": Dialect,
    "foreign table": ForeignTable,
}


@overload
def parse(table: Mapping[str, Any], source: str, kind: Literal["measurement"]) -> Measurement: ...
@overload
def parse(table: Mapping[str, Any], source: str, kind: Literal["rig"]) -> Rig: ...
@overload
def parse(table: Mapping[str, Any], source: str, kind: Literal["dialect"]) -> Dialect: ...
@overload
def parse(table: Mapping[str, Any], source: str, kind: Literal["foreign table"]) -> ForeignTable: ...
def parse(table: Mapping[str, Any], source: str, kind: str) -> Measurement | Rig | Dialect | ForeignTable:
    """Return the description that a table holds.

    Raises
    ------
    DescriptionError
        With every problem at once, each with file (`source`), key and remedy.
    """
    model = _MODELS[kind]
    try:
        return model.model_validate(table)
    except ValidationError as error:
        raise DescriptionError(every_problem(error, model, table, source)) from error
