"""The description of a study: a TOML table becomes a job, its measurement and rig taken along."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field, ValidationError

from daq.description.problems import Table, every_problem
from daq.devices.files import with_dialects
from daq.errors import DescriptionError
from daq.scale.job import KNOWN
from daq.service.files import changed, read_file, read_table
from daq.service.load import FAULTS, Wishes, load


class Study(Table):
    """A study: `kernel` draws so many times, each with its own seed; `block` draws go to a worker at once.

    `measurement` is a path beside the file; `changes` are laid over it by dotted key. `vary` names one such
    key and its values, each a study of its own with the same seeds. `parameters` are for a kernel of your
    own.
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
    vary: Annotated[Mapping[str, tuple[str | int | float | bool, ...]], Field(max_length=1)] = {}
    parameters: Mapping[str, Any] = {}


def read_study(path: Path) -> tuple[Study, dict[str, dict[str, Any]]]:
    """Return a study, and what its kernel is given, by what is varied ("" where nothing is).

    Raises
    ------
    DescriptionError
        With every problem of the study, its measurement or its rig.
    """
    table = read_table(read_file(path), path)
    try:
        study = Study.model_validate(table)
    except ValidationError as error:
        raise DescriptionError(every_problem(error, Study, table, str(path))) from error
    return study, {told: _given(study, changes, path) for told, changes in _variants(study)}


def _variants(study: Study) -> Iterator[tuple[str, dict[str, Any]]]:
    """Yield what is changed, with its name."""
    if not study.vary:
        yield "", dict(study.changes)
    for key, values in study.vary.items():
        for value in values:
            yield f"{key} = {value}", dict(study.changes) | {key: value}


def _given(study: Study, changes: Mapping[str, Any], path: Path) -> dict[str, Any]:
    """Return what a kernel is given: files as text or tables, since a worker elsewhere has no way to them."""
    given = dict(study.parameters)
    if study.kernel not in KNOWN:
        return given | ({"changes": changes} if changes else {})
    file = _measurement(study, path)
    loaded = load(file, Wishes(hours=study.hours), changes=changes)
    if study.kernel == "rehearsed":
        texts = {name: text.decode() for name, text in loaded.texts.items()}
        if study.faults is not None:
            texts[FAULTS] = read_file(path.parent / study.faults).decode()
        return given | {"texts": texts, "changes": dict(changes), "hours": study.hours}
    if study.faults is not None:
        raise DescriptionError((f"{path}, faults: for kernel 'rehearsed' only. Take it out.",))
    table = changed(read_table(read_file(file), file), changes)
    if study.hours is not None:
        table["itinerary"]["laps"] = loaded.measurement.itinerary.laps
    rig = file.parent / table["rig"]
    return given | {
        "measurement": table,
        "rig": with_dialects(read_table(read_file(rig), rig), rig.parent)[0],
    }


def _measurement(study: Study, path: Path) -> Path:
    if study.measurement is None:
        raise DescriptionError((f"{path}, measurement: kernel {study.kernel!r} needs one. Name its file.",))
    return path.parent / study.measurement
