"""Turning what is wrong with a description into sentences: what, where, and what to do."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from difflib import get_close_matches
from typing import Annotated, Any

from pydantic import BaseModel, ConfigDict, Field, ValidationError
from pydantic_core import ErrorDetails

Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]


class Table(BaseModel):
    """A table of a description: frozen, finite numbers only, unknown keys refused."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


class ProblemsError(ValueError):
    """Several things that do not fit together in one table, each as (key, text)."""

    def __init__(self, found: list[tuple[str, str]]) -> None:
        super().__init__("; ".join(f"{key}: {text}" for key, text in found))
        self.found = found


def every_problem(
    error: ValidationError, model: type[BaseModel], table: Mapping[str, Any], source: str
) -> tuple[str, ...]:
    """Return every problem of a table as a sentence with file and key.

    Unknown keys are taken out and the table is read again, so that what does not hang together is found too.
    """
    found = _sentences(error, model, source)
    unknown = [detail["loc"] for detail in error.errors() if detail["type"] == "extra_forbidden"]
    if unknown:
        try:
            model.model_validate(_without(table, unknown))
        except ValidationError as second:
            found += [sentence for sentence in _sentences(second, model, source) if sentence not in found]
    return tuple(found)


def _sentences(error: ValidationError, model: type[BaseModel], source: str) -> list[str]:
    found: list[str] = []
    for detail in error.errors():
        cause = detail.get("ctx", {}).get("error")
        if isinstance(cause, ProblemsError):
            found += [f"{source}, {key}: {text}." for key, text in cause.found]
        else:
            found.append(_sentence(detail, model, source))
    return found


def _without(table: Mapping[str, Any], places: list[tuple[int | str, ...]]) -> dict[str, Any]:
    """Return a copy of a table without the keys at the given places."""
    copy = {key: dict(value) if isinstance(value, Mapping) else value for key, value in table.items()}
    for place in places:
        inner: Any = copy
        for part in place[:-1]:
            if isinstance(inner[part], Mapping):
                inner[part] = dict(inner[part])
            inner = inner[part]
        inner.pop(place[-1], None)
    return copy


def _sentence(detail: ErrorDetails, model: type[BaseModel], source: str) -> str:
    key = ".".join(str(part) for part in detail["loc"])
    place = f"{source}, {key}" if key else source
    if detail["type"] == "extra_forbidden":
        return f"{place}: unknown key. {_nearest(detail, model)}"
    if detail["type"] == "missing":
        return f"{place}: this key is missing. Add it."
    message = detail["msg"].removeprefix("Value error, ").rstrip(".")
    message = message[:1].lower() + message[1:]
    given = detail["input"]
    shown = f", not {given!r}" if isinstance(given, (str, int, float)) else ""
    return f"{place}: {message}{shown}."


def _nearest(detail: ErrorDetails, model: type[BaseModel]) -> str:
    known = sorted(_known_keys(model, list(detail["loc"][:-1])))
    close = get_close_matches(str(detail["loc"][-1]), known, n=1, cutoff=0.5)
    return f"Did you mean {close[0]!r}?" if close else f"Known keys here: {', '.join(known)}."


def _known_keys(model: type[BaseModel], path: list[Any]) -> set[str]:
    """Return the keys that the table at the end of a path may hold."""
    tables: list[type[BaseModel]] = [model]
    for part in path:
        below = [annotation for table in tables for annotation in _annotations(table, part)]
        tables = below or tables
    return {field.alias or name for table in tables for name, field in table.model_fields.items()}


def _annotations(table: type[BaseModel], part: Any) -> Iterator[type[BaseModel]]:
    field = table.model_fields.get(str(part))
    if field is not None:
        yield from _models(field.annotation)


def _models(annotation: Any) -> Iterator[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        yield annotation
    for inner in getattr(annotation, "__args__", ()):
        yield from _models(inner)
