"""The description of a study: a TOML table becomes a job, its measurement and rig taken along."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field, ValidationError

from daq.description.problems import Table, every_problem
from daq.devices.files import with_dialects
from daq.errors import DescriptionError
from daq.service.load import load


class Study(Table):
    """A study: `kernel` draws so many times, each with its own seed; `block` draws go to a worker at once.

    `measurement` is a path beside the file; `changes` are laid over it by dotted key; `parameters` are for a
    kernel of your own.
    """

    schema_: Literal[1] = Field(alias="schema")
    name: Annotated[str, Field(pattern="^[a-z0-9][a-z0-9-]*$")]
    kernel: str = "synthetic"
    draws: Annotated[int, Field(ge=1, le=10**9)]
    seed: Annotated[int, Field(ge=0)] = 1
    block: Annotated[int, Field(ge=1, le=10**7)] = 100
    measurement: str | None = None
    hours: Annotated[float, Field(gt=0)] | None = None
    faults: str | None = None
    changes: Mapping[str, Any] = {}
    parameters: Mapping[str, Any] = {}


def read_study(path: Path) -> tuple[Study, dict[str, Any]]:
    """Return a study and what its kernel is given.

    Raises
    ------
    DescriptionError
        With every problem of the study, its measurement or its rig.
    """
    table = _toml(path)
    try:
        study = Study.model_validate(table)
    except ValidationError as error:
        raise DescriptionError(every_problem(error, Study, table, str(path))) from error
    if study.kernel == "synthetic":
        return study, dict(study.parameters) | _tables(study, path)
    if study.kernel == "rehearsed":
        return study, dict(study.parameters) | _texts(study, path)
    return study, dict(study.parameters)


def _tables(study: Study, path: Path) -> dict[str, Any]:
    """Return measurement and rig as tables, changes laid over."""
    file = _measurement(study, path)
    load(file)  # every problem of both at once
    table = _changed(_toml(file), study.changes)
    rig, _ = with_dialects(_toml(file.parent / str(table["rig"])), (file.parent / str(table["rig"])).parent)
    return {"measurement": table, "rig": rig}


def _texts(study: Study, path: Path) -> dict[str, Any]:
    """Return the files of the description as text: a worker elsewhere has no other way to them."""
    if study.changes:
        raise DescriptionError((f"{path}, changes: for kernel 'synthetic' only. Change a copy of the file.",))
    loaded = load(_measurement(study, path))
    texts = {name: text.decode() for name, text in loaded.texts.items()}
    table = tomllib.loads(texts["description.toml"])
    texts["description.toml"] = texts["description.toml"].replace(f'"{table["rig"]}"', '"rig.toml"')
    found: dict[str, Any] = {"texts": texts, "measurement": "description.toml", "hours": study.hours}
    if study.faults is not None:
        found["texts"]["faults.toml"] = _read(path.parent / study.faults).decode()
        found["faults"] = "faults.toml"
    return found


def _measurement(study: Study, path: Path) -> Path:
    if study.measurement is None:
        raise DescriptionError((f"{path}, measurement: kernel {study.kernel!r} needs one. Name its file.",))
    return path.parent / study.measurement


def _changed(table: dict[str, Any], changes: Mapping[str, Any]) -> dict[str, Any]:
    for dotted, value in changes.items():
        *path, last = dotted.split(".")
        inner = table
        for key in path:
            inner = inner.setdefault(key, {})
        inner[last] = value
    return table


def _toml(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(_read(path).decode())
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise DescriptionError((f"{path}: not a TOML file: {error}. Mend it there.",)) from error


def _read(path: Path) -> bytes:
    try:
        return path.read_bytes()
    except OSError as error:
        reason = (error.strerror or "cannot be read").lower()
        raise DescriptionError((f"{path}: {reason}. Name a readable file.",)) from error
