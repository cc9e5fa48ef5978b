"""What is chosen by name: simulated benches and the page, found by entry point, never imported."""

from __future__ import annotations

from collections.abc import Mapping
from importlib.metadata import EntryPoint, entry_points
from typing import Any, cast

from daq.description import Rig
from daq.errors import DescriptionError
from daq.ports import Bench


def open_bench(
    rig: Rig, *, seed: int | None, transport: str, state: bytes | None, faults: Mapping[str, Any] | None
) -> Bench:
    """Return the simulated bench of a rig, its hosts up, on a virtual clock.

    Parameters
    ----------
    seed
        Replaces `bench.seed` of the rig when given.
    transport
        "tcp" (loopback sockets) or "direct" (in process); the same bytes either way.
    state
        What `Bench.keep` gave before the break, for a resumed rehearsal.
    faults
        A fault script for the bench to read, None for none.

    Raises
    ------
    DescriptionError
        When the rig is not simulated, or names a model that nobody registered.
    """
    if rig.bench is None:
        raise DescriptionError(
            (f"rig {rig.name!r} has no table [bench]: it cannot be rehearsed. Add one, or use `tercet run`.",)
        )
    model = str(rig.bench.get("model", ""))
    opener = _registered("tercet.bench", model, "bench.model").load()
    return cast(Bench, opener(rig, seed=seed, transport=transport, state=state, faults=faults))


def page_module() -> str:
    """Return the module that serves the page, for `python -m`."""
    (entry,) = entry_points(group="tercet.page")
    return entry.module.removesuffix(".__main__")


def _registered(group: str, name: str, key: str) -> EntryPoint:
    known = entry_points(group=group)
    if name not in known.names:
        raise DescriptionError(
            (f"{key}: nothing is registered as {name!r}. Known names: {', '.join(sorted(known.names))}.",)
        )
    return known[name]
