"""Speech: lines, commands, replies, and what replies mean; the parts that dialects are made of."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from typing import Annotated

from pydantic import AfterValidator, Field, model_validator

from daq.description.patterns import pattern_problem
from daq.description.problems import Table


def _is_line(text: str) -> str:
    if not (text.isascii() and text.isprintable()):
        raise ValueError("a command is one line of printable ASCII characters")
    return text


def _is_pattern(text: str) -> str:
    problem = pattern_problem(text.replace("{letter}", "X"))
    if problem:
        raise ValueError(problem)
    return text


Line = Annotated[str, Field(min_length=1, max_length=200), AfterValidator(_is_line)]
Pattern = Annotated[str, Field(min_length=1, max_length=500), AfterValidator(_is_pattern)]
End = Annotated[str, Field(pattern=r"^[\r\n;]{1,2}$")]
Group = Annotated[str, Field(pattern="^[a-z][a-z0-9_]*$")]
Seconds = Annotated[float, Field(ge=0, le=600)]


class Speech(Table):
    """Ends of line and waiting times; `late_s`: no reply comes later than that after its question."""

    send_end: End = "\n"
    reply_end: End = "\n"
    quiet_s: Seconds = 0.05
    late_s: Seconds = 1.5
    most_bytes: Annotated[int, Field(ge=8, le=1_000_000)] = 256
    repeats: Annotated[int, Field(ge=0, le=10)] = 2
    ignore: Pattern | None = None


class Identity(Table):
    """The question that every opening and every resynchronisation asks, and what its reply looks like."""

    send: Line
    reply: Pattern


class When(Table):
    """A condition on one group of a reply: one of some texts, none of them, or a bit of a number."""

    group: Group
    any_of: Sequence[str] = ()
    none_of: Sequence[str] = ()
    mask: Annotated[int, Field(ge=1)] | None = None

    @model_validator(mode="after")
    def _one_way(self) -> When:
        if sum((bool(self.any_of), bool(self.none_of), self.mask is not None)) != 1:
            raise ValueError("say one of any_of, none_of and mask")
        return self

    def holds(self, reply: re.Match[str]) -> bool:
        """Return whether a reply fulfils the condition; a group that is absent fulfils none."""
        text = reply[self.group]
        if text is None:
            return False
        if self.mask is not None:
            return bool(int(text) & self.mask)
        return text in self.any_of if self.any_of else text not in self.none_of


class Command(Table):
    """A command, its reply, and what the reply means; without `reply` it has none."""

    send: Line
    reply: Pattern | None = None
    safe_to_repeat: bool = False
    busy_when: When | None = None
    homed_when: When | None = None
    alarm_when: When | None = None
    overflow_when: When | None = None
    open_when: When | None = None
    blocked_when: When | None = None

    def conditions(self) -> Mapping[str, When]:
        """Return the conditions by their keys."""
        found = {key: getattr(self, key) for key in type(self).model_fields if key.endswith("_when")}
        return {key: when for key, when in found.items() if when is not None}


class Confirm(Table):
    """The question that follows a command without a reply, in the same write, and the good answers to it."""

    send: Line
    reply: Pattern
    good_when: When
