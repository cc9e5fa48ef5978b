"""Standing warnings: raised once, updated, cleared, acknowledged."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from daq.estimate.watch import Concern


@dataclass(frozen=True, slots=True)
class Standing:
    """A warning that stands: its name, what it says now, and when; times are text, of the run's UTC."""

    name: str  # the kind and how often it was raised, like "level-1"
    says: Concern
    since_utc: str
    updated_utc: str
    acknowledged_by: str = ""
    acknowledged_utc: str = ""


@dataclass(frozen=True, slots=True)
class Change:
    """What became of a warning: "raised", "worse" (it now wakes, or puts kappa in doubt), or "cleared"."""

    became: str
    warning: Standing


def look_again(
    before: Sequence[Standing], found: Iterable[Concern], raised: dict[str, int], utc: str
) -> tuple[tuple[Standing, ...], tuple[Change, ...]]:
    """Return what stands now, and what changed.

    Parameters
    ----------
    before
        What stood before.
    found
        The concerns as they are now, one of a kind.
    raised
        How often each kind was raised so far; counted up here.
    utc
        Now.
    """
    known = {one.says.kind: one for one in before}
    now, changes = list[Standing](), list[Change]()
    for concern in found:
        old = known.pop(concern.kind, None)
        if old is None:
            raised[concern.kind] = raised.get(concern.kind, 0) + 1
            new = Standing(f"{concern.kind}-{raised[concern.kind]}", concern, utc, utc)
            changes.append(Change("raised", new))
        elif concern == old.says:
            new = old
        else:
            new = _updated(old, concern, utc)
            if _is_worse(old.says, concern):
                changes.append(Change("worse", new))
        now.append(new)
    changes += [Change("cleared", gone) for gone in known.values()]
    return tuple(now), tuple(changes)


def acknowledge(standing: Sequence[Standing], name: str, who: str, utc: str) -> tuple[Standing, ...]:
    """Return the warnings with the one of a name (all of them for "") acknowledged by a person."""
    return tuple(
        replace(one, acknowledged_by=who, acknowledged_utc=utc) if name in ("", one.name) else one
        for one in standing
    )


def _updated(old: Standing, concern: Concern, utc: str) -> Standing:
    """Return a warning that says something new; what has become worse is no longer acknowledged."""
    new = replace(old, says=concern, updated_utc=utc)
    return replace(new, acknowledged_by="", acknowledged_utc="") if _is_worse(old.says, concern) else new


def _is_worse(old: Concern, new: Concern) -> bool:
    return (new.wakes and not old.wakes) or (new.in_doubt and not old.in_doubt)
