"""Reply patterns: which of them may be used in a dialect, and whether two of them can match the same text.

The part of the pattern language that is allowed describes a finite machine, so both questions have exact
answers: no pattern can hang the program on a long reply, and a text that two patterns share is found if there
is one.
"""

from __future__ import annotations

import re
from collections import deque
from dataclasses import dataclass, field
from importlib import import_module
from typing import Any

_parser: Any = import_module(
    "re._parser"
)  # the standard library's own reading of a pattern; it has no other name

_ASCII = range(128)
_EVERY = (1 << 128) - 1
_NEWLINE = 1 << 10
_LONGEST_COPY = 64  # a counted repeat is written out so many times at most
_CLASSES = {
    "CATEGORY_DIGIT": r"\d",
    "CATEGORY_NOT_DIGIT": r"\D",
    "CATEGORY_SPACE": r"\s",
    "CATEGORY_NOT_SPACE": r"\S",
    "CATEGORY_WORD": r"\w",
    "CATEGORY_NOT_WORD": r"\W",
}
_PLAIN = frozenset({"LITERAL", "NOT_LITERAL", "ANY", "IN", "AT"})


def pattern_problem(pattern: str) -> str | None:
    """Return why a pattern may not be used for replies, or None when it may."""
    try:
        parsed = _parser.parse(pattern, re.ASCII)
    except (re.error, OverflowError, RecursionError) as error:
        return f"no regular expression ({error})"
    return _problem(parsed, repeated=False)


def groups_of(pattern: str) -> frozenset[str]:
    """Return the names of the groups of a pattern."""
    return frozenset(re.compile(pattern).groupindex)


def shared_text(one: str, other: str) -> str | None:
    """Return the shortest text that both patterns match whole, or None when there is none."""
    machines = (_machine(one), _machine(other))
    start = tuple(machine.closed({0}) for machine in machines)
    queue, seen = deque([(start, "")]), {start}
    while queue:
        state, text = queue.popleft()
        if all(machine.end in places for machine, places in zip(machines, state, strict=True)):
            return text
        for letter, following in _steps(machines, state):
            if following not in seen:
                seen.add(following)
                queue.append((following, text + letter))
    return None


@dataclass
class _Machine:
    """A machine without memory: moves on sets of letters (bit masks), and moves that need no letter."""

    moves: list[list[tuple[int, int]]] = field(default_factory=lambda: [[]])
    free: list[list[int]] = field(default_factory=lambda: [[]])
    end: int = 0

    def place(self) -> int:
        self.moves.append([])
        self.free.append([])
        return len(self.moves) - 1

    def closed(self, places: set[int]) -> frozenset[int]:
        """Return the places and all that can be reached from them without a letter."""
        found, rest = set(places), list(places)
        while rest:
            for following in self.free[rest.pop()]:
                if following not in found:
                    found.add(following)
                    rest.append(following)
        return frozenset(found)

    def after(self, places: frozenset[int], letter: int) -> frozenset[int]:
        """Return the places that a letter leads to."""
        return self.closed({to for at in places for mask, to in self.moves[at] if mask >> letter & 1})


def _steps(machines: tuple[_Machine, ...], state: tuple[frozenset[int], ...]) -> list[tuple[str, Any]]:
    found: dict[Any, str] = {}
    for letter in _letters(machines, state):
        following = tuple(
            machine.after(places, letter) for machine, places in zip(machines, state, strict=True)
        )
        if all(following):
            found.setdefault(following, chr(letter))
    return [(letter, following) for following, letter in found.items()]


def _letters(machines: tuple[_Machine, ...], state: tuple[frozenset[int], ...]) -> list[int]:
    """Return the letters that lead on in both machines."""
    both = _EVERY
    for machine, places in zip(machines, state, strict=True):
        mine = 0
        for at in places:
            for mask, _ in machine.moves[at]:
                mine |= mask
        both &= mine
    return [letter for letter in _ASCII if both >> letter & 1]


def _machine(pattern: str) -> _Machine:
    machine = _Machine()
    machine.end = _add_all(machine, _parser.parse(pattern, re.ASCII), 0)
    return machine


def _add_all(machine: _Machine, parsed: Any, at: int) -> int:
    for node in parsed:
        at = _add(machine, node, at)
    return at


def _add(machine: _Machine, node: Any, at: int) -> int:
    """Add one node of a pattern behind a place and return where it ends."""
    name, value = str(node[0]), node[1]
    if name == "AT":
        return at
    if name == "SUBPATTERN":
        return _add_all(machine, value[-1], at)
    if name == "BRANCH":
        end = machine.place()
        for way in value[1]:
            begin = machine.place()
            machine.free[at].append(begin)
            machine.free[_add_all(machine, way, begin)].append(end)
        return end
    if name in ("MAX_REPEAT", "MIN_REPEAT"):
        return _add_repeat(machine, value, at)
    end = machine.place()
    machine.moves[at].append((_letters_of(name, value), end))
    return end


def _add_repeat(machine: _Machine, value: Any, at: int) -> int:
    least, most, inner = int(value[0]), int(value[1]), value[2]
    for _ in range(min(least, _LONGEST_COPY)):
        at = _add_all(machine, inner, at)
    if most > least + _LONGEST_COPY:  # without end, or as good as
        machine.free[_add_all(machine, inner, at)].append(at)
        end = machine.place()
        machine.free[at].append(end)
        return end
    ends = [at]
    for _ in range(most - least):
        ends.append(_add_all(machine, inner, ends[-1]))
    end = machine.place()
    for early in ends:
        machine.free[early].append(end)
    return end


def _letters_of(name: str, value: Any) -> int:
    match name:
        case "LITERAL":
            return 1 << value if value < 128 else 0
        case "NOT_LITERAL":
            return _EVERY & ~(1 << value if value < 128 else 0)
        case "ANY":
            return _EVERY & ~_NEWLINE
        case _:
            return _set_of(value)


def _set_of(parts: Any) -> int:
    mask, negated = 0, False
    for part, value in parts:
        match str(part):
            case "NEGATE":
                negated = True
            case "LITERAL":
                mask |= 1 << value if value < 128 else 0
            case "RANGE":
                mask |= sum(1 << letter for letter in _ASCII if value[0] <= letter <= value[1])
            case _:
                wanted = re.compile(_CLASSES[str(value)], re.ASCII)
                mask |= sum(1 << letter for letter in _ASCII if wanted.match(chr(letter)))
    return _EVERY & ~mask if negated else mask


def _problem(parsed: Any, *, repeated: bool) -> str | None:
    problems = (_node_problem(str(node[0]), node[1], repeated) for node in parsed)
    return next(filter(None, problems), None)


def _node_problem(name: str, value: Any, repeated: bool) -> str | None:
    if name == "SUBPATTERN":
        return _problem(value[-1], repeated=repeated)
    if name == "BRANCH":
        if repeated:
            return "a choice inside a repeat, which can take for ever on a long reply"
        return next(filter(None, (_problem(way, repeated=repeated) for way in value[1])), None)
    if name in ("MAX_REPEAT", "MIN_REPEAT"):
        if repeated and value[0] != value[1]:
            return "a repeat inside a repeat, which can take for ever on a long reply"
        return _problem(value[2], repeated=repeated or int(value[1]) > 1)
    return None if name in _PLAIN else f"{name.lower().replace('_', ' ')} is not allowed in a reply pattern"
