"""The four errors of the program: each says what, where, and what to do."""

from __future__ import annotations

import re

_QUOTED = re.compile(r"""(?<!reply to )(?:b?'(?:[^'\\]|\\.)*'|b?"(?:[^"\\]|\\.)*\")""")


class DaqError(Exception):
    """An error that a person can act on.

    Parameters
    ----------
    what
        What happened, one sentence without the full stop.
    where
        File and key, device and address, or row.
    remedy
        What to do about it.
    """

    exit_status = 1

    def __init__(self, what: str, *, where: str = "", remedy: str = "") -> None:
        super().__init__(what)
        self.what, self.where, self.remedy = what, where, remedy

    def __str__(self) -> str:
        place = f"{self.where}: " if self.where else ""
        advice = f" {self.remedy}." if self.remedy else ""
        return f"{place}{self.what}.{advice}"


class DescriptionError(DaqError):
    """A description that cannot be carried out; `problems` lists every reason at once."""

    exit_status = 2

    def __init__(self, problems: tuple[str, ...]) -> None:
        super().__init__("\n".join(problems))
        self.problems = problems

    def __str__(self) -> str:
        return self.what


class DeviceError(DaqError):
    """A device that did not do what it was asked; `kind` says how, a row of the table of reactions."""

    exit_status = 3

    def __init__(self, what: str, *, where: str = "", remedy: str = "", kind: str = "refused") -> None:
        super().__init__(what, where=where, remedy=remedy)
        self.kind = kind


class StorageError(DaqError):
    """An archive that cannot be written or read."""

    exit_status = 4


def without_replies(error: DeviceError) -> DeviceError:
    """Return an error that quotes the question and no reply: that may be a count which is to stay hidden."""
    garbled = "it gave a reply that makes no sense"
    what = garbled if error.kind == "garbage" else _QUOTED.sub("...", error.what)
    return DeviceError(what, where=error.where, remedy=error.remedy, kind=error.kind)


def in_short(error: DaqError) -> str:
    """Return an error as one sentence, without the advice that is for a run that has given up."""
    place = f"{error.where}: " if error.where else ""
    return f"{place}{error.what}".rstrip(".") + "."
