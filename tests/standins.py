"""Stand-ins in memory for the sequencer's ports, on a virtual clock; faults are handed over."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

from daq.errors import DeviceError
from daq.ports import AxisState, Clock, Counted, Devices
from daq.records import Reading

Fault = Callable[[str], None]


def no_fault(what: str) -> None:
    """Let everything happen."""


@dataclass
class MemoryStage:
    """An axis that arrives after `move_s`, settling included."""

    name: str
    clock: Clock
    move_s: float
    trace: list[tuple[int, str]]
    fault: Fault = no_fault
    limits_mm: tuple[float, float] = (-20.0, 20.0)
    homed: bool = True
    offset_mm: float = 0.0
    target_mm: float = 0.0
    due_ns: int = 0

    def open(self) -> None:
        self.fault(f"{self.name} open")

    def close(self) -> None:
        self.trace.append((self.clock.now_ns(), f"{self.name} close"))

    def identity(self) -> str:
        return f"memory stage {self.name}"

    def home(self) -> None:
        self.homed = True

    def start(self, position_mm: float) -> float:
        self.fault(f"{self.name} start")
        self.trace.append((self.clock.now_ns(), f"{self.name} to {position_mm:g}"))
        moves_s = self.move_s if position_mm != self.target_mm else 0.0
        self.target_mm, self.due_ns = position_mm, self.clock.now_ns() + round(moves_s * 1e9)
        return moves_s

    def state(self) -> AxisState:
        self.fault(f"{self.name} state")
        moving = self.clock.now_ns() < self.due_ns
        return AxisState(self.target_mm, self.target_mm + self.offset_mm, moving, self.homed)

    def stop_now(self) -> None:
        self.trace.append((self.clock.now_ns(), f"{self.name} stop"))


@dataclass
class MemoryMask:
    """A mask whose openings stand 1 mm apart, on one axis."""

    axis: MemoryStage

    def show(self, opening: int) -> float:
        return self.axis.start(float(opening))

    def state(self) -> Mapping[str, AxisState]:
        return {self.axis.name: self.axis.state()}

    def target_mm(self, opening: int) -> Mapping[str, float]:
        return {self.axis.name: float(opening)}

    def stop_now(self) -> None:
        self.axis.stop_now()


@dataclass
class MemoryCounter:
    """A counter that counts its gates and needs `readout_s` after each."""

    clock: Clock
    trace: list[tuple[int, str]]
    readout_s: float = 0.0
    fault: Fault = no_fault
    name: str = "counter"
    gates: int = 0
    dwell_s: float = 0.0
    close_ns: int = 0
    overflow: bool = False

    def open(self) -> None:
        self.fault("counter open")

    def close(self) -> None:
        self.trace.append((self.clock.now_ns(), "counter close"))

    def identity(self) -> str:
        return "memory counter"

    def arm(self, dwell_s: float) -> None:
        self.fault("counter arm")
        self.trace.append((self.clock.now_ns(), "arm"))
        self.gates, self.dwell_s = self.gates + 1, dwell_s
        self.close_ns = self.clock.now_ns() + round(dwell_s * 1e9)

    def busy(self) -> bool:
        return self.clock.now_ns() < self.close_ns

    def read(self) -> Counted:
        self.clock.sleep_until(self.close_ns + round(self.readout_s * 1e9))
        self.fault("counter read")
        self.trace.append((self.clock.now_ns(), "read"))
        return Counted((float(1000 + self.gates),), self.dwell_s, self.overflow)

    def abort(self) -> None:
        self.trace.append((self.clock.now_ns(), "abort"))


@dataclass
class MemorySensor:
    """A thermometer."""

    name: str = "room"
    every_s: float = 60.0
    asked: int = 0
    fault: Fault = no_fault

    def open(self) -> None: ...

    def close(self) -> None: ...

    def identity(self) -> str:
        return "memory sensor"

    def read(self) -> Mapping[str, tuple[float, str]]:
        self.fault("sensor read")
        self.asked += 1
        return {"temperature": (293.0 + self.asked, "K")}


@dataclass
class MemorySink:
    """Keeps readings."""

    clock: Clock
    trace: list[tuple[int, str]]
    kept: list[Reading] = field(default_factory=list)

    def append_events(self, chunk: bytes) -> None:
        raise NotImplementedError

    def commit(self, reading: Reading) -> int:
        self.trace.append((self.clock.now_ns(), "commit"))
        self.kept.append(reading)
        return len(self.kept) - 1

    def stands_done(self) -> Mapping[int, int]:
        return {}


@dataclass
class MemoryBench:
    """Devices, sink, and what happened in which order."""

    clock: Clock
    fault: Fault = no_fault
    mask_move_s: float = 0.7
    detector_move_s: float = 0.3
    readout_s: float = 0.1
    trace: list[tuple[int, str]] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.mask_stage = MemoryStage("mask", self.clock, self.mask_move_s, self.trace, self.fault)
        self.detector = MemoryStage("detector", self.clock, self.detector_move_s, self.trace, self.fault)
        self.counter = MemoryCounter(self.clock, self.trace, self.readout_s, self.fault)
        self.sensor = MemorySensor(fault=self.fault)
        self.sink = MemorySink(self.clock, self.trace)
        self.devices = Devices(
            mask=MemoryMask(self.mask_stage),
            detector=self.detector,
            counter=self.counter,
            sensors=(self.sensor,),
            stages=(self.mask_stage, self.detector),
            all=(self.mask_stage, self.detector, self.counter, self.sensor),
            tolerance_mm={"mask": 0.01, "detector": 0.01},
        )


def fails_once(what: str, kind: str, times: int = 1) -> Fault:
    """Return a fault that strikes the first `times` times that something is done, after one good time."""
    seen = {"calls": 0}

    def fault(doing: str) -> None:
        if doing != what:
            return
        seen["calls"] += 1
        if 1 < seen["calls"] <= 1 + times:
            raise DeviceError("no reply", where=doing, remedy="Check the cable", kind=kind)

    return fault
