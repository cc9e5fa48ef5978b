"""Dialect: how a device speaks in lines, written down as a table, so that a lab adds one without Python.

Numbers alone are put into a command, in fields of a fixed list, so that no file can send what it should not;
every reply is matched whole; what is safe to send twice is said to be; a stage without a stop is refused.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from itertools import combinations
from typing import Annotated, Literal

from pydantic import Field, model_validator

from daq.description.patterns import groups_of, shared_text
from daq.description.problems import ProblemsError, Table
from daq.description.speech import Command, Confirm, Group, Identity, Pattern, Speech

NUMBER = r"[+-]?\d*\.?\d*(?:[eE][+-]?\d+)?"

FIELDS: Mapping[str, Mapping[str, frozenset[str]]] = {
    "stage": {
        "setup": frozenset({"letter"}),
        "home": frozenset({"letter"}),
        "move": frozenset({"letter", "position", "speed", "speed_per_min"}),
        "status": frozenset({"letter"}),
        "stop": frozenset({"letter"}),
    },
    "counter": {
        "setup": frozenset(),
        "arm": frozenset({"dwell"}),
        "status": frozenset(),
        "fetch": frozenset(),
        "abort": frozenset(),
    },
    "sensor": {"setup": frozenset(), "read": frozenset()},
    "shutter": {"setup": frozenset(), "block": frozenset(), "unblock": frozenset(), "status": frozenset()},
}
_WANTED = {
    "stage": ("move", "status", "stop"),
    "counter": ("fetch",),
    "sensor": ("read",),
    "shutter": ("block", "unblock", "status"),
}
_GROUPS = {("stage", "status"): "encoder", ("counter", "fetch"): "value"}
_NEVER_TWICE = frozenset({("counter", "arm"), ("stage", "stop"), ("counter", "abort")})
_SILENT = frozenset({("stage", "stop"), ("counter", "abort")})
_SENDS = {("stage", "move"): "{position}", ("counter", "arm"): "{dwell}"}
_FIELD = re.compile(r"\{([a-z_]+)\}")


class AxisWords(Table):
    """How a stage writes a place: units of the device for 1 mm, decimals sent."""

    device_per_mm: Annotated[float, Field(gt=0)] = 1.0
    decimals: Annotated[int, Field(ge=0, le=9)] = 4
    home_required: bool = True


class CounterWords(Table):
    """What a counter is.

    "gated"; "running" all the time (a totaliser that rolls over); "frequency": it gives a mean rate; "power":
    it gives a mean power (group `value`), the variance of that mean (`variance`) and how many readings it is
    the mean of (`repeats`).
    """

    mode: Literal["gated", "running", "frequency", "power"] = "gated"
    dwell_decimals: Annotated[int, Field(ge=0, le=9)] = 6
    bits: Annotated[int, Field(ge=8, le=63)] | None = None
    most_hz: Annotated[float, Field(gt=0)] | None = None


class Quantity(Table):
    """What a group of a sensor's reply means: unit, and value = offset + factor * number."""

    unit: str
    factor: float = 1.0
    offset: float = 0.0


class Dialect(Table):
    """A dialect file."""

    schema_: Literal[1] = Field(alias="schema")
    kind: Literal["stage", "counter", "sensor", "shutter"]
    name: str
    link: Speech = Speech()
    identity: Identity
    axis: AxisWords | None = None
    counter: CounterWords | None = None
    quantity: Mapping[Group, Quantity] = {}
    command: Mapping[str, Command]
    confirm: Confirm | None = None
    refusals: Sequence[Pattern] = ()

    @model_validator(mode="after")
    def _hangs_together(self) -> Dialect:
        found = [*self._table_problems(), *self._identity_problems(), *self._counter_problems()]
        for name, command in self.command.items():
            found += _command_problems(self, name, command)
        found += self._quantity_problems()
        if found:
            raise ProblemsError(found)
        return self

    @property
    def axis_words(self) -> AxisWords:
        """How the stage writes a place."""
        return self.axis or AxisWords()

    @property
    def counter_words(self) -> CounterWords:
        """What the counter is."""
        return self.counter or CounterWords()

    @property
    def gives_slices(self) -> bool:
        """Whether the reply to a counter's fetch holds the parts of the gate."""
        return "slices" in groups_of(self.command["fetch"].reply or "") if "fetch" in self.command else False

    def _table_problems(self) -> Iterator[tuple[str, str]]:
        wanted = list(_WANTED[self.kind])
        if self.kind == "stage" and self.axis_words.home_required:
            wanted.append("home")
        if self.kind == "counter" and self.counter_words.mode != "running":
            wanted.append("arm")
        for name in wanted:
            if name not in self.command:
                yield f"command.{name}", f"a {self.kind} needs this command"
        for key, kind in (("axis", "stage"), ("counter", "counter"), ("quantity", "sensor")):
            if getattr(self, key) and self.kind != kind:
                yield key, f"a {self.kind} has no use for this table"

    def _identity_problems(self) -> Iterator[tuple[str, str]]:
        number = shared_text(self.identity.reply, NUMBER)
        if number is not None:
            yield (
                "identity.reply",
                f"a late {number!r} would pass for the identity; ask for more than a number",
            )

    def _counter_problems(self) -> Iterator[tuple[str, str]]:
        words = self.counter_words
        if words.mode == "running" and (words.bits is None or words.most_hz is None):
            yield "counter", "a running totaliser needs bits (it rolls over at 2**bits) and most_hz"
        missing = {"variance", "repeats"} - self._fetched_groups()
        if words.mode == "power" and missing:
            yield (
                "command.fetch.reply",
                f"a power meter's reply needs groups named {', '.join(sorted(missing))}",
            )

    def _fetched_groups(self) -> set[str]:
        fetch = self.command.get("fetch")
        return set(groups_of(fetch.reply)) if fetch and fetch.reply else set()

    def _quantity_problems(self) -> Iterator[tuple[str, str]]:
        if self.kind != "sensor" or "read" not in self.command:
            return
        groups = groups_of(self.command["read"].reply or "")
        for name in sorted(groups ^ set(self.quantity)):
            yield (
                "quantity",
                f"{name!r} stands in only one of the groups of command.read.reply and [quantity]",
            )


def _command_problems(dialect: Dialect, name: str, command: Command) -> Iterator[tuple[str, str]]:
    key, kind = f"command.{name}", dialect.kind
    known = FIELDS[kind]
    if name not in known:
        yield key, f"a {kind} has no such command; it has {', '.join(known)}"
        return
    rest = _FIELD.sub("", command.send)
    if "{" in rest or "}" in rest:
        yield f"{key}.send", "braces hold the name of a field and nothing else"
    for unknown in sorted(set(_FIELD.findall(command.send)) - known[name]):
        yield f"{key}.send", f"no field {unknown!r} here; there is {', '.join(sorted(known[name])) or 'none'}"
    yield from _sense_problems(dialect, name, command)


def _sense_problems(dialect: Dialect, name: str, command: Command) -> Iterator[tuple[str, str]]:
    key, place = f"command.{name}", (dialect.kind, name)
    field = _SENDS.get(place)
    if field and field not in command.send:
        yield f"{key}.send", f"it has to send {field}"
    if place in _NEVER_TWICE and command.safe_to_repeat:
        yield f"{key}.safe_to_repeat", "this is never sent twice"
    if place in _SILENT:
        if command.reply is not None:
            yield f"{key}.reply", "it is sent past everything else: no reply to it is awaited"
    elif command.reply is None and dialect.confirm is None:
        yield key, "it needs a reply, or the dialect a table [confirm]"
    yield from _group_problems(key, _GROUPS.get(place), command)


def _group_problems(key: str, wanted: str | None, command: Command) -> Iterator[tuple[str, str]]:
    groups = groups_of(_plain(command.reply or ""))
    if wanted and not {wanted, f"{wanted}_1"} & groups:
        yield f"{key}.reply", f"its reply needs a group named {wanted!r}"
    if "refused" in groups:
        yield f"{key}.reply", "no group can be named 'refused'"
    for condition, when in command.conditions().items():
        if when.group not in groups:
            yield f"{key}.{condition}", f"its reply has no group {when.group!r}"


def _plain(pattern: str) -> str:
    """Return a reply pattern as it is for an axis X."""
    return pattern.replace("{letter}", "X")


def dialect_warnings(dialect: Dialect) -> tuple[str, ...]:
    """Return a sentence for every two replies that the same text can match, when one of them is a value."""
    patterns = {f"command.{name}": one.reply for name, one in dialect.command.items() if one.reply}
    patterns |= {"identity": dialect.identity.reply}
    patterns |= {"confirm": dialect.confirm.reply} if dialect.confirm else {}
    return tuple(
        f"the replies to {one} and {other} can be the same text, for example {text!r}: a late one could pass "
        f"for the other. Let the device answer them differently if it can."
        for (one, first), (other, second) in combinations(patterns.items(), 2)
        if groups_of(_plain(first)) | groups_of(_plain(second))
        and (text := shared_text(_plain(first), _plain(second))) is not None
    )
