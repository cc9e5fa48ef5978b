"""Fault scripts: what goes wrong on a simulated bench, and when; same script and seed, same faults.

A script is a TOML table with a seed and any number of ``[[fault]]``, each due at a run time (``at_s``), at a
gate (``at_gate``, the n-th that a counter opens) or at random (``per_hour``).

==========================================  ==============================================================
kind                                        does, once it is due
==========================================  ==============================================================
``silent half garbage double late nak``     spoils the next reply of ``device``; a ``nak`` is not carried out
``drop``                                    ends the link of ``device`` and refuses it for ``seconds``
``alarm``                                   stops the controller ``device`` with an alarm, ``text``
``stall``                                   stops ``axis`` where it is, short of its target
``slip``                                    moves ``axis`` by ``size_mm``, ``hidden`` from its encoder or not
``overflow``                                the next gate of the counter ``device`` overflows
``saturation``                              ``device`` counts no more than ``rate_hz``, for ``seconds``
``beam-off beam-step``                      no light for ``seconds``; ``factor`` times the light from then on
``monitor-lost``                            no light at the monitor channels for ``seconds``
``trip``                                    the pressure at the gauge ``device`` is ``factor`` times higher
``disk-full``                               ``free_bytes`` are left on the disk, for ``seconds``
``clock-step``                              UTC jumps by ``step_s``
==========================================  ==============================================================

A fault that waits for a reply or for a gate is dropped when none has come within ``expires_s``.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import accumulate, repeat
from typing import Annotated, Any, Literal

from pydantic import Field, ValidationError, model_validator

from daq.description import Rig
from daq.description.device import DeviceEntry
from daq.description.problems import ProblemsError, Table, every_problem
from daq.errors import DescriptionError
from daq.ports import Clock
from simulators.draws import generator
from simulators.motion import NS

Positive = Annotated[float, Field(gt=0)]
Kind = Literal[
    "silent", "half", "garbage", "double", "late", "nak",
    "drop", "alarm", "stall", "slip", "overflow", "saturation", "beam-off", "beam-step",
    "monitor-lost", "trip", "clock-step", "disk-full",
]  # fmt: skip

REPLY_KINDS = frozenset({"silent", "half", "garbage", "double", "late", "nak"})
_NEEDS: Mapping[str, tuple[str, ...]] = {
    **dict.fromkeys(("silent", "half", "garbage", "double", "nak", "alarm", "overflow"), ("device",)),
    **dict.fromkeys(("late", "drop"), ("device", "seconds")),
    "stall": ("axis",),
    "slip": ("axis", "size_mm"),
    "saturation": ("device", "seconds", "rate_hz"),
    **dict.fromkeys(("beam-off", "monitor-lost"), ("seconds",)),
    "beam-step": ("factor",),
    "trip": ("device", "seconds", "factor"),
    "clock-step": ("step_s",),
    "disk-full": ("seconds", "free_bytes"),
}
_WHEN = ("at_s", "at_gate", "per_hour")
_OPTIONS = {"nak": ("text",), "alarm": ("text",), "slip": ("hidden",)}


class Fault(Table):
    """One fault of a script."""

    kind: Kind
    at_s: Annotated[float, Field(ge=0)] | None = None
    at_gate: Annotated[int, Field(ge=1)] | None = None
    per_hour: Positive | None = None
    device: str | None = None
    axis: str | None = None
    seconds: Positive | None = None
    expires_s: Positive = 60.0
    size_mm: float | None = None
    hidden: bool | None = None
    rate_hz: Positive | None = None
    factor: Annotated[float, Field(ge=0)] | None = None
    step_s: float | None = None
    free_bytes: Annotated[float, Field(ge=0)] | None = None
    text: Annotated[str, Field(pattern=r"^[ -~]{1,60}$")] | None = None

    @model_validator(mode="after")
    def _hangs_together(self) -> Fault:
        given = {key for key in type(self).model_fields if getattr(self, key) is not None}
        when = given & set(_WHEN)
        wanted = {"kind", "expires_s", *_NEEDS[self.kind], *when}
        problems = [("fault", f"a fault {self.kind!r} needs {key!r}") for key in sorted(wanted - given)]
        unused = given - wanted - set(_OPTIONS.get(self.kind, ()))
        problems += [("fault", f"a fault {self.kind!r} has no use for {key!r}") for key in sorted(unused)]
        if len(when) != 1:
            problems.append(("fault", f"a fault {self.kind!r} is due by one of {', '.join(_WHEN)}"))
        if problems:
            raise ProblemsError(problems)
        return self

    @property
    def target(self) -> str:
        """What it strikes: a device, an axis, or the beam and the clock, that have no name."""
        return self.device or self.axis or ""


class Script(Table):
    """A fault script."""

    seed: Annotated[int, Field(ge=0)] = 1
    fault: Sequence[Fault] = ()


@dataclass(frozen=True, slots=True)
class Struck:
    """A fault that was injected, the truth of a bench; `outcome` is "struck" or "expired"."""

    at_ns: int
    kind: str
    target: str
    outcome: str = "struck"


def read_script(table: Mapping[str, Any], rig: Rig) -> Script:
    """Return the fault script that a table holds.

    Raises
    ------
    DescriptionError
        With every problem at once, also for a device or an axis that the rig does not have.
    """
    try:
        script = Script.model_validate(table)
    except ValidationError as error:
        raise DescriptionError(every_problem(error, Script, table, "fault script")) from error
    problems = tuple(_foreign(script, rig))
    if problems:
        raise DescriptionError(problems)
    return script


def _foreign(script: Script, rig: Rig) -> Iterator[str]:
    controllers = [axis.device for axis in rig.axes.values()]
    counters = {name for name, entry in rig.devices.items() if _counts(entry)}
    for place, fault in enumerate(script.fault):
        where = f"fault script, fault.{place}"
        for key, name, known in (("device", fault.device, rig.devices), ("axis", fault.axis, rig.axes)):
            if name is not None and name not in known:
                yield f"{where}.{key}: there is no {key} {name!r}. Name one of {', '.join(known)}."
        if fault.kind == "alarm" and fault.device not in controllers:
            yield f"{where}.device: an alarm needs a device that moves an axis, not {fault.device!r}."
        if fault.kind in ("overflow", "saturation") and fault.device in (rig.devices.keys() - counters):
            yield f"{where}.device: a fault {fault.kind!r} needs a counter, not {fault.device!r}."


def _counts(entry: DeviceEntry) -> bool:
    return "counter" in entry.driver or (entry.dialect is not None and entry.dialect.kind == "counter")


class Faults:
    """Strikes when faults are due; keeps what was injected in `struck`.

    Parameters
    ----------
    script
        What is to go wrong.
    clock
        The run clock; faults whose time has passed already (a resumed rehearsal) are left out.
    acts
        Kind -> what carries a fault out that strikes at once; replies and gates ask by themselves.
    """

    def __init__(self, script: Script, clock: Clock, acts: Mapping[str, Callable[[Fault], None]]) -> None:
        self.struck: list[Struck] = []
        self._clock, self._acts, self._seed = clock, acts, script.seed
        self._due: dict[tuple[str, str], deque[tuple[Fault, int]]] = {}
        self._at_gate = [fault for fault in script.fault if fault.at_gate is not None]
        for place, fault in enumerate(script.fault):
            if fault.at_gate is None:
                self._plan(fault, _times_ns(fault, script.seed, place))

    def gate_opened(self, number: int) -> None:
        """Make the faults of the n-th gate due."""
        for fault in self._at_gate:
            if fault.at_gate == number:
                self._strike(fault)

    def take(self, device: str, sort: str) -> Fault | None:
        """Return the fault that spoils a reply or a gate (`sort` "reply", "overflow"), if one is due."""
        due = self._fresh(device, sort)
        if not due:
            return None
        fault, _ = due.popleft()
        self._note(fault, "struck")
        return fault

    def due(self, device: str) -> str:
        """Return the kind of fault that will spoil the next reply of a device, "" for none."""
        due = self._fresh(device, "reply")
        return due[0][0].kind if due else ""

    def noise(self, size: int) -> bytes:
        """Return bytes of line noise, none of them an end of line, others for every fault that has struck."""
        return generator(self._seed, "noise", len(self.struck)).integers(128, 256, size, "uint8").tobytes()

    def _fresh(self, device: str, sort: str) -> deque[tuple[Fault, int]]:
        due = self._due.get((device, sort), deque())
        while due and due[0][1] < self._clock.now_ns():
            self._note(due.popleft()[0], "expired")
        return due

    def _plan(self, fault: Fault, times_ns: Iterator[int]) -> None:
        at_ns = next((at for at in times_ns if at >= self._clock.now_ns()), None)
        if at_ns is not None:
            self._clock.call_at(at_ns, lambda: self._strike_and_plan(fault, times_ns))

    def _strike_and_plan(self, fault: Fault, times_ns: Iterator[int]) -> None:
        self._strike(fault)
        self._plan(fault, times_ns)

    def _strike(self, fault: Fault) -> None:
        sort = "reply" if fault.kind in REPLY_KINDS else fault.kind
        if sort in ("reply", "overflow"):
            until_ns = self._clock.now_ns() + round(fault.expires_s * NS)
            self._due.setdefault((fault.target, sort), deque()).append((fault, until_ns))
        else:
            self._acts[fault.kind](fault)
            self._note(fault, "struck")

    def _note(self, fault: Fault, outcome: str) -> None:
        self.struck.append(Struck(self._clock.now_ns(), fault.kind, fault.target, outcome))


def _times_ns(fault: Fault, seed: int, place: int) -> Iterator[int]:
    if fault.per_hour is None:
        return iter([round((fault.at_s or 0.0) * NS)])
    random, mean_s = generator(seed, f"fault {place}", 0), 3600.0 / fault.per_hour
    gaps_s = (random.exponential(mean_s) for _ in repeat(None))
    return (round(at_s * NS) for at_s in accumulate(gaps_s))
