"""Hearing: what operators ask of a run, taken in between visits and while it holds, and answered."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from daq.errors import DeviceError
from daq.estimate.stopping import BY_HAND
from daq.service.live import stamp
from daq.service.night import Hold, Night, tell
from daq.service.requests import Request

BENCH_ONLY = "This hold has to be cleared by a person at the bench: tercet resume LAB --at-bench"
MUTE_MIN = 60.0


def hear(night: Night) -> None:
    """Take in what operators have asked, oldest first, and tell them what became of it."""
    for request in night.asked.requests():
        outcome = _ANSWERS[request.what](night, request)
        night.asked.settled(request, f"{outcome} at {stamp(night.clock.utc_ns())}")
        more = {"about": request.about} if request.about else {}
        tell(night, f"{request.what} asked", who=request.who, **more)


def _hold(night: Night, request: Request) -> str:
    why = f"{request.who} asked the run to hold."
    night.holds.setdefault("asked", Hold("asked", why, night.clock.now_ns()))
    return "heard"


def _resume(night: Night, request: Request) -> str:
    night.holds.pop("asked", None)
    return f"refused: {BENCH_ONLY}; asked" if any(hold.at_bench for hold in night.holds.values()) else "heard"


def _resume_at_bench(night: Night, request: Request) -> str:
    """Clear every hold, and find references again where the person at the bench said so."""
    if request.about == "home":
        try:
            for stage in night.devices.stages:
                if not stage.state().homed:
                    stage.home()
        except DeviceError as error:
            tell(night, "not homed", text=str(error))
            return f"not done: {error}; asked"
    night.holds.clear()
    return "heard"


def _end(night: Night, request: Request) -> str:
    night.asked.end, night.asked.kind, night.asked.who = True, BY_HAND, request.who
    return "heard"


def _end_after_lap(night: Night, request: Request) -> str:
    night.asked.end_after_lap, night.asked.kind, night.asked.who = True, BY_HAND, request.who
    return "heard"


def _acknowledge(night: Night, request: Request) -> str:
    night.live.watcher.acknowledge(request.about, request.who, stamp(night.clock.utc_ns()))
    return "heard"


def _mute(night: Night, request: Request) -> str:
    try:
        minutes = min(max(float(request.about), 1.0), 24 * 60.0)
    except ValueError:
        minutes = MUTE_MIN
    night.live.mute(night.clock.utc_ns() + round(minutes * 60e9))
    return "heard"


_ANSWERS: Mapping[str, Callable[[Night, Request], str]] = {
    "hold": _hold,
    "resume": _resume,
    "resume-at-bench": _resume_at_bench,
    "end": _end,
    "end-after-lap": _end_after_lap,
    "park": _end,
    "acknowledge": _acknowledge,
    "mute": _mute,
}
