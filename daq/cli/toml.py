"""TOML: a table of plain values as text."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from typing import Any


def toml_text(table: Mapping[str, Any]) -> str:
    """Return a table of strings, numbers, booleans, lists and tables as TOML; None is left out."""
    return "\n".join(_section(table, ())) + "\n"


def _section(table: Mapping[str, Any], path: tuple[str, ...]) -> Iterator[str]:
    inner = {key: value for key, value in table.items() if isinstance(value, Mapping)}
    plain = {key: value for key, value in table.items() if key not in inner and value is not None}
    if path and (plain or not inner):
        yield ""
        yield f"[{'.'.join(map(_key, path))}]"
    yield from (f"{_key(key)} = {_value(value)}" for key, value in plain.items())
    for key, value in inner.items():
        yield from _section(value, (*path, key))


def _key(key: str) -> str:
    return key if key.replace("-", "").replace("_", "").isalnum() and key.isascii() else json.dumps(key)


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, Mapping):
        return f"{{ {', '.join(f'{_key(key)} = {_value(inner)}' for key, inner in value.items())} }}"
    if isinstance(value, (list, tuple)):
        return f"[{', '.join(map(_value, value))}]"
    return value.isoformat() if hasattr(value, "isoformat") else repr(value)
