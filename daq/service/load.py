"""Loading: description files from disk, with the command line's own wishes laid over them."""

from __future__ import annotations

import json
import math
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from hashlib import sha256
from importlib import resources
from pathlib import Path
from types import MappingProxyType
from typing import Any

from daq.description import Measurement, Rig, joint_problems, parse
from daq.devices.files import with_dialects
from daq.errors import DescriptionError
from daq.itinerary import Itinerary, compose
from daq.service.files import changed, read_file, read_table

DESCRIPTION, RIG, FAULTS, LEVELS = "description.toml", "rig.toml", "faults.toml", "levels.json"
LONGEST_H = 10_000


@dataclass(frozen=True, slots=True)
class Loaded:
    """A measurement and its rig, their files verbatim, and what the command line changed."""

    measurement: Measurement
    rig: Rig
    texts: Mapping[str, bytes]
    wishes: Wishes

    def itinerary(self) -> Itinerary:
        """Return the composed itinerary."""
        return compose(self.measurement, self.rig)

    def with_faults(self, path: Path) -> Loaded:
        """Return the same with a fault script beside the description, for a simulated bench to read.

        Raises
        ------
        DescriptionError
            When it cannot be read, or is no TOML.
        """
        text = read_file(path)
        read_table(text, path)
        return replace(self, texts={**self.texts, FAULTS: text})

    def with_levels(self, levels: Sequence[tuple[float, float]]) -> Loaded:
        """Return the same with a source that stands at (run time [s], strength), straight between.

        Raises
        ------
        DescriptionError
            When the rig is not simulated.
        """
        if self.rig.bench is None:
            raise DescriptionError((f"rig {self.rig.name!r} has no table [bench]: it cannot be rehearsed.",))
        bench = {**self.rig.bench, "source": {"levels": [list(pair) for pair in levels]}}
        text = json.dumps(bench["source"]["levels"]).encode()
        return replace(
            self, rig=self.rig.model_copy(update={"bench": bench}), texts={**self.texts, LEVELS: text}
        )

    @property
    def faults(self) -> Mapping[str, Any] | None:
        """The fault script of a rehearsal, if there is one."""
        return tomllib.loads(self.texts[FAULTS].decode()) if FAULTS in self.texts else None

    @property
    def bench_seed(self) -> int | None:
        """The seed of the simulated bench that the command line asked for, if any."""
        return None if self.wishes.seed is None else derived_seed("bench", self.wishes.seed)


@dataclass(frozen=True, slots=True)
class Wishes:
    """What the command line changes of a description: hours (whole pairs), one seed for all, the order."""

    hours: float | None = None
    seed: int | None = None
    order: str | None = None

    def laid_over(self, table: Mapping[str, Any]) -> dict[str, Any]:
        """Return the measurement table with seed and order changed."""
        changed = dict(table)
        inner = dict(table.get("itinerary", {})) if isinstance(table.get("itinerary", {}), Mapping) else {}
        if self.seed is not None:
            inner["seed"] = derived_seed("itinerary", self.seed)
        if self.order is not None:
            inner["order"] = self.order
        return changed | ({"itinerary": inner} if inner else {})


NO_WISHES = Wishes()


def derived_seed(tag: str, seed: int) -> int:
    """Return the seed of one part of the program from the one seed of the command line."""
    return int.from_bytes(sha256(f"tercet:{tag}:{seed}".encode()).digest()[:7], "big")


def config_dir() -> Path:
    """Return the folder of the example descriptions: in the wheel, or in the source tree."""
    packaged = Path(str(resources.files("daq"))) / "configs"
    return packaged if packaged.is_dir() else Path(str(resources.files("daq"))).parent / "configs"


def load(
    path: Path,
    wishes: Wishes = NO_WISHES,
    rig: Path | None = None,
    changes: Mapping[str, Any] = MappingProxyType({}),
) -> Loaded:
    """Return a measurement and its rig from their files; `rig` takes the place of the rig that it names.

    `changes` are laid over the measurement by dotted key ("estimate.dead_time_s"); its text is as it was.

    Raises
    ------
    DescriptionError
        With every problem of both files at once.
    """
    text = read_file(path)
    table = changed(read_table(text, path), changes)
    rig_name = table.get("rig")
    rig_path = rig or (path.parent / rig_name if isinstance(rig_name, str) else None)
    return _loaded(table, text, path, rig_path, wishes)


def load_rig(path: Path) -> Rig:
    """Return a rig from its file, and the dialects that it names.

    Raises
    ------
    DescriptionError
        With every problem of the file at once.
    """
    table, _ = with_dialects(read_table(read_file(path), path), path.parent)
    return parse(table, str(path), "rig")


def load_run(folder: Path, wishes: Wishes) -> Loaded:
    """Return the description that a run folder holds verbatim, with the wishes it was started with."""
    loaded = load_changed(folder, {}, wishes)
    if (folder / LEVELS).exists():
        loaded = loaded.with_levels(json.loads(read_file(folder / LEVELS)))
    return loaded.with_faults(folder / FAULTS) if (folder / FAULTS).exists() else loaded


def load_changed(folder: Path, changes: Mapping[str, Any], wishes: Wishes = NO_WISHES) -> Loaded:
    """Return the description of a run with some keys ("estimate.dead_time_s") changed; its copies are not."""
    return load(folder / DESCRIPTION, wishes, folder / RIG, changes)


def _loaded(table: dict[str, Any], text: bytes, path: Path, rig_path: Path | None, wishes: Wishes) -> Loaded:
    problems: list[str] = []
    measurement: Measurement | None = None
    rig: Rig | None = None
    rig_text, dialects = b"", dict[str, bytes]()
    try:
        measurement = parse(wishes.laid_over(table), str(path), "measurement")
    except DescriptionError as error:
        problems += error.problems
    try:
        if rig_path is not None:
            rig_text = read_file(rig_path)
            rig_table, dialects = with_dialects(read_table(rig_text, rig_path), rig_path.parent)
            rig = parse(rig_table, str(rig_path), "rig")
    except DescriptionError as error:
        problems += error.problems
    if measurement and rig:
        problems += joint_problems(measurement, rig, str(path))
    if problems or not measurement or not rig:
        raise DescriptionError(tuple(problems))
    texts = {DESCRIPTION: text, RIG: rig_text, **dialects}
    return Loaded(_in_hours(measurement, rig, wishes, path), rig, texts, wishes)


def _in_hours(measurement: Measurement, rig: Rig, wishes: Wishes, path: Path) -> Measurement:
    """Return the measurement with as many whole pairs as fit into the hours wished for."""
    if wishes.hours is None:
        return measurement
    if not (math.isfinite(wishes.hours) and 0 < wishes.hours <= LONGEST_H):
        raise DescriptionError(
            (f"--hours: give a number above 0 and up to {LONGEST_H}, not {wishes.hours:g}.",)
        )
    one_pair_s = compose(_with_laps(measurement, 2), rig).total_s
    pairs = int(wishes.hours * 3600 // one_pair_s)
    while pairs and compose(_with_laps(measurement, 2 * pairs), rig).total_s > wishes.hours * 3600:
        pairs -= 1
    if pairs < 1:
        raise DescriptionError(
            (
                f"{path}: {wishes.hours:g} h is shorter than one pair of laps, {one_pair_s / 3600:.2f} h. "
                "Give more hours, or fewer positions, or a shorter dwell.",
            )
        )
    return _with_laps(measurement, 2 * pairs)


def _with_laps(measurement: Measurement, laps: int) -> Measurement:
    order = measurement.itinerary.model_copy(update={"laps": laps})
    return measurement.model_copy(update={"itinerary": order})
