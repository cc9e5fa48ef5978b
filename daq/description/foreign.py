"""Foreign tables: where in somebody else's visits stands what, and in which unit."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Literal

from pydantic import AwareDatetime, Field

from daq.description.problems import Positive, Table


class Columns(Table):
    """The heads of the columns that hold what a visit needs; `lap` and `attempt` where they are known."""

    opening: str
    position_mm: str
    live_s: str
    values: Annotated[tuple[str, ...], Field(min_length=1, max_length=64)]
    gate_open_s: str | None = None
    dwell_s: str | None = None
    lap: str | None = None
    attempt: str | None = None

    def heads(self) -> dict[str, str]:
        """Return the head of every column that is named, by our word for it."""
        single = {name: head for name, head in self if name != "values" and head is not None}
        return single | {f"values.{place}": head for place, head in enumerate(self.values)}


class ForeignTable(Table):
    """How a table of visits that was made elsewhere is read.

    `measurement` is a path beside this file: it says what was measured, with which slits, and how counts
    become a residual. `openings` turns their words for an opening into ours; `factors` turns their numbers
    into our units, by our word for the column.
    """

    schema_: Literal[1] = Field(alias="schema")
    measurement: str
    started_utc: AwareDatetime
    columns: Columns
    openings: Mapping[str, str] = {}
    factors: Mapping[str, Positive] = {}
    delimiter: Annotated[str, Field(min_length=1, max_length=1)] = ","
