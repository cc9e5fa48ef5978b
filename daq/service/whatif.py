"""What if: which questions an archive can answer, and what the answer changes, side by side."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from daq.errors import DescriptionError

# Top-level key of the description -> why its change cannot be answered from an archive.
UNANSWERABLE = {
    "itinerary": "what another order, or another dwell, would have counted was never counted",
    "positions": "nothing was counted at any other position",
    "expect": "the plan was made from it; a plan that was made otherwise would have other visits",
    "pilot": "the plan was made from it; a plan that was made otherwise would have other visits",
    "rig": "the counts came from that rig",
    "name": "the run keeps its name",
    "schema": "the file was written to that schema",
}
REHEARSE = "Rehearse it instead: `tercet rehearse`"


def read_changes(words: Sequence[str]) -> dict[str, Any]:
    """Return KEY=VALUE words as changes; a value is read as TOML, else taken as text.

    Raises
    ------
    DescriptionError
        For a word without an equals sign or without a key.
    """
    changes = {}
    for word in words:
        key, sign, value = word.partition("=")
        if not (sign and key.strip()):
            raise DescriptionError((f"--set {word}: write KEY=VALUE, like estimate.dead_time_s=50e-9.",))
        changes[key.strip()] = _value(value.strip())
    return changes


def refuse_unanswerable(changes: Mapping[str, Any], meta: Mapping[str, Any]) -> None:
    """Refuse questions that the archive cannot answer, every one in words.

    Raises
    ------
    DescriptionError
        With a sentence for each of them.
    """
    problems = tuple(_problems(changes, meta))
    if problems:
        raise DescriptionError(problems)


def differences(
    before: Mapping[str, Any], after: Mapping[str, Any], warned: tuple[Sequence[str], Sequence[str]]
) -> list[dict[str, Any]]:
    """Return a table of figures, old and new: those that tell what an answer changes.

    Parameters
    ----------
    before, after
        Figures of the archived run and of its replay.
    warned
        The warnings of both, by name.
    """
    table = [{"figure": name, "old": before.get(name), "new": after.get(name)} for name in _TOLD]
    names = [", ".join(sorted(set(one))) or "none" for one in warned]
    table.append({"figure": "warnings", "old": names[0], "new": names[1]})
    return [row | {"same": row["old"] == row["new"]} for row in table]


_TOLD = (
    *("kappa", "kappa_se", "kappa_counting_se", "excess", "estimator", "pairs"),
    *("visits", "visits_repeated", "stands_left_out", "visits_not_used", "live_s"),
)


def _value(text: str) -> Any:
    try:
        return tomllib.loads(f"value = {text}")["value"]
    except tomllib.TOMLDecodeError:
        return text


def _problems(changes: Mapping[str, Any], meta: Mapping[str, Any]) -> Iterator[str]:
    for key, value in changes.items():
        where, head = f"--set {key}", key.partition(".")[0]
        if head in UNANSWERABLE:
            yield f"{where}: the archive cannot answer this: {UNANSWERABLE[head]}. {REHEARSE}."
        elif key == "estimate.counting" and value != meta["counting"]:
            yield f"{where}: the archive holds {meta['counting']}, and cannot say what else there was."
        elif key == "quality.dispersion_p" and not meta.get("slices"):
            yield f"{where}: no gate was divided, so the archive cannot answer this. Leave the key out."
        elif key.startswith("quality.limits."):
            yield from _unsensed(where, key.split(".")[2], meta)


def _unsensed(where: str, sensor: str, meta: Mapping[str, Any]) -> Iterator[str]:
    sensed = meta.get("sensors", {})
    if sensor not in sensed:
        known = ", ".join(sensed) or "none"
        yield f"{where}: the archive holds no {sensor}, so it cannot answer this. It holds: {known}."
