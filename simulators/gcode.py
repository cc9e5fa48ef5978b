"""G-code: the words of one line, and what makes a line no line."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache

_COMMENT = re.compile(r"\([^()]*\)")
_WORD = re.compile(r"([A-Z])([-+]?(?:\d+\.?\d*|\.\d+))")


class RefusalError(Exception):
    """A line that is not carried out; the number and the text are the controller's reply."""

    def __init__(self, number: int, text: str) -> None:
        super().__init__(text)
        self.number, self.text = number, text


@dataclass(frozen=True, slots=True)
class Block:
    """The words of one line: G and M numbers in order, and the other letters with their numbers."""

    g: tuple[str, ...]
    m: tuple[str, ...]
    values: Mapping[str, float]


@lru_cache(maxsize=1024)  # a night repeats the same few lines
def parse(line: str) -> Block:
    """Return the words of a line; blanks, comments in parentheses and case do not matter.

    Raises
    ------
    RefusalError
        For anything that is not a letter with a plain number (so for NaN and infinity too), and for a letter
        other than G and M that stands there twice.

    References
    ----------
    .. [1] ISO 6983-1, program format (words, block); from memory.
    .. [2] "The NIST RS274/NGC Interpreter, Version 3", NISTIR 6556 (2000), sect. 3.3; from memory.
    """
    rest = re.sub(r"\s", "", _COMMENT.sub("", line)).upper()
    words: list[tuple[str, str]] = _WORD.findall(rest)
    if "".join(letter + number for letter, number in words) != rest:
        raise RefusalError(1, "not a line of words")
    values = [(letter, float(number)) for letter, number in words if letter not in "GMN"]
    if len(dict(values)) < len(values):
        raise RefusalError(1, "a word stands there twice")
    return Block(_numbers(words, "G"), _numbers(words, "M"), dict(values))


def _numbers(words: list[tuple[str, str]], wanted: str) -> tuple[str, ...]:
    return tuple(f"{float(number):g}" for letter, number in words if letter == wanted)
