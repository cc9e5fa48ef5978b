"""By hand: a person at the bench homes, moves, reads, and watches the rate while turning screws.

Nothing is planned, nothing is armed, nothing is archived; limits hold as in a run, and no axis that has lost
its reference is moved but to find it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from math import sqrt

from daq import openings
from daq.errors import DaqError, DeviceError
from daq.ports import AxisState, Clock, Devices, Stage
from daq.tasks.bar import rate_line, rates_hz

POLL_NS = 50_000_000
GRACE_S = 10.0
READ_S, GATE_S, FOR_S = 1.0, 0.5, 10.0

HELP = (
    "home [AXIS]          find the reference of an axis, or of every axis",
    "go AXIS MM           move an axis, within its limits",
    "go OPENING           show an opening: go AB, go none",
    "where                say where every axis is",
    "read [S]             count once, for S seconds",
    "rate [S [FOR]]       show the rate as a bar, gate of S seconds by gate, until Enter (or for FOR s)",
    "sensors              read every sensor",
    "shutter open|shut    let the beam pass, or block it (no safety function)",
    "stop                 ask every axis to stop (a request over a data link, no more)",
    "end                  leave; nothing is moved",
)


@dataclass(slots=True)
class Bench:
    """What is under a person's hands; `over` says that the person has seen enough of the rate."""

    devices: Devices
    clock: Clock
    over: Callable[[], bool] = lambda: False
    watched: bool = True  # whether somebody can say that it is over
    stages: Mapping[str, Stage] = field(init=False)

    def __post_init__(self) -> None:
        self.stages = {stage.name: stage for stage in self.devices.stages}


Lines = Iterator[str]  # a line that begins with "\r" is written over the one before


def obey(bench: Bench, line: str) -> Lines:
    """Yield what a person is told while one line is carried out.

    Raises
    ------
    DaqError
        When the line cannot be meant: nothing was sent then.
    DeviceError
        When a device does not do what it was asked.
    """
    word, *rest = line.split()
    if word not in COMMANDS:
        raise _unclear(f"there is no {word!r} here")
    yield from COMMANDS[word](bench, rest)


def halt(bench: Bench) -> Lines:
    """Ask every axis to stop and the counter to forget its gate; a device that fails is told of."""
    acts = [*(stage.stop_now for stage in bench.devices.stages), bench.devices.counter.abort]
    for act in acts:
        try:
            act()
        except DeviceError as error:
            yield str(error)
    yield "asked every axis to stop; look whether they did"


def _home(bench: Bench, words: Sequence[str]) -> Lines:
    for name in words or tuple(bench.stages):
        yield f"{name} looks for its reference"
        _stage(bench, name).home()
        yield _place(name, bench.stages[name].state())


def _go(bench: Bench, words: Sequence[str]) -> Lines:
    match list(words):
        case [opening]:
            try:
                mask = openings.mask(opening)
                targets_mm = bench.devices.mask.target_mm(mask)
            except (ValueError, KeyError):
                raise _unclear(f"the mask has no opening {opening!r}") from None
            _refuse_lost(bench, targets_mm)
            yield from _arrive(bench, targets_mm, bench.devices.mask.show(mask))
        case [axis, place]:
            stage, place_mm = _stage(bench, axis), _number(place, "a place in mm", any_sign=True)
            _refuse_lost(bench, [axis])
            yield from _arrive(bench, {axis: place_mm}, stage.start(place_mm))
        case _:
            raise _unclear("say `go AXIS MM` or `go OPENING`")


def _refuse_lost(bench: Bench, axes: Sequence[str] | Mapping[str, float]) -> None:
    for axis in axes:
        state = bench.stages[axis].state()
        if state.alarm:
            raise DeviceError(
                f"alarm {state.alarm}", where=f"axis {axis}", remedy="Look at it, then clear it"
            )
        if not state.homed:
            remedy = f"See that nothing is in its way, then `home {axis}`"
            raise DeviceError("it has no reference and is not moved", where=f"axis {axis}", remedy=remedy)


def _arrive(bench: Bench, targets_mm: Mapping[str, float], predicted_s: float) -> Lines:
    """Wait until axes stand still, and say where: an encoder off its target is said, not mended."""
    clock = bench.clock
    until_ns = clock.now_ns() + round((2 * predicted_s + GRACE_S) * 1e9)
    clock.sleep_until(clock.now_ns() + round(predicted_s * 1e9))
    for axis, target_mm in targets_mm.items():
        state = bench.stages[axis].state()
        while state.moving and not state.alarm:
            if clock.now_ns() > until_ns:
                raise DeviceError(
                    "it does not arrive", where=f"axis {axis}", remedy="Look at it", kind="timeout"
                )
            clock.sleep_until(clock.now_ns() + POLL_NS)
            state = bench.stages[axis].state()
        off_mm = state.encoder_mm - target_mm
        off = f"; that is {off_mm:+.4f} mm off" if abs(off_mm) > bench.devices.tolerance_mm[axis] else ""
        yield _place(axis, state) + off


def _where(bench: Bench, words: Sequence[str]) -> Lines:
    _no_more(words)
    yield from (_place(name, stage.state()) for name, stage in bench.stages.items())


def _read(bench: Bench, words: Sequence[str]) -> Lines:
    seconds = _number(words[0], "seconds") if words else READ_S
    _no_more(words[1:])
    bench.devices.counter.arm(seconds)
    counted = bench.devices.counter.read()
    for channel, (value, rate_hz) in enumerate(zip(counted.values, rates_hz(counted), strict=True)):
        error_hz = sqrt(max(value, 1.0)) / counted.live_s
        yield f"channel {channel}: {value:g} in {counted.live_s:g} s, {rate_hz:.6g} +- {error_hz:.2g}/s"
    if counted.overflow:
        yield "the counter says that it overflowed: the numbers are too low"


def _rate(bench: Bench, words: Sequence[str]) -> Lines:
    seconds = _number(words[0], "seconds") if words else GATE_S
    limit_s = _number(words[1], "seconds") if len(words) > 1 else None if bench.watched else FOR_S
    _no_more(words[2:])
    began_ns, best_hz, before = bench.clock.now_ns(), 0.0, ""
    while not bench.over() and (limit_s is None or bench.clock.now_ns() < began_ns + round(limit_s * 1e9)):
        bench.devices.counter.arm(seconds)
        counted = bench.devices.counter.read()
        best_hz = max(best_hz, rates_hz(counted)[0])
        yield before + rate_line(counted, best_hz)
        before = "\r"


def _sensors(bench: Bench, words: Sequence[str]) -> Lines:
    _no_more(words)
    for sensor in bench.devices.sensors:
        yield from (
            f"{sensor.name}_{key}: {value:.6g} {unit}" for key, (value, unit) in sensor.read().items()
        )


def _shutter(bench: Bench, words: Sequence[str]) -> Lines:
    shutter = bench.devices.shutter
    if shutter is None:
        raise _unclear("this rig has no shutter")
    if list(words) not in (["open"], ["shut"], []):
        raise _unclear("say `shutter open` or `shutter shut`")
    if words:
        shutter.armed = True  # by hand: somebody is there
        (shutter.unblock if words[0] == "open" else shutter.block)()
    yield f"the shutter is {shutter.state()} (no safety function)"


def _stop(bench: Bench, words: Sequence[str]) -> Lines:
    _no_more(words)
    yield from halt(bench)


def _help(bench: Bench, words: Sequence[str]) -> Lines:
    yield from HELP


Command = Callable[[Bench, Sequence[str]], Lines]
COMMANDS: Mapping[str, Command] = {
    "home": _home,
    "go": _go,
    "where": _where,
    "read": _read,
    "rate": _rate,
    "sensors": _sensors,
    "shutter": _shutter,
    "stop": _stop,
    "help": _help,
}


def _stage(bench: Bench, name: str) -> Stage:
    if name not in bench.stages:
        raise _unclear(f"there is no axis {name!r}; there is {', '.join(bench.stages)}")
    return bench.stages[name]


def _number(text: str, what: str, any_sign: bool = False) -> float:
    try:
        value = float(text)
    except ValueError:
        raise _unclear(f"{text!r} is not {what}") from None
    if not (any_sign or 0 < value < float("inf")):
        raise _unclear(f"{text} is not {what} above 0")
    return value


def _no_more(words: Sequence[str]) -> None:
    if words:
        raise _unclear(f"{words[0]!r} is one word too many")


def _place(name: str, state: AxisState) -> str:
    doing = "moving" if state.moving else "still"
    homed = "" if state.homed else ", no reference: home it"
    alarm = f", ALARM {state.alarm}" if state.alarm else ""
    return f"{name} {state.encoder_mm:.4f} mm ({doing}{homed}{alarm})"


def _unclear(what: str) -> DaqError:
    return DaqError(f"{what}; nothing was sent", where="by hand", remedy="Type `help`")
