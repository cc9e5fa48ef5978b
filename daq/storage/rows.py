"""A reading as one row of numbers and back: what the journal keeps, with the row's checksum."""

from __future__ import annotations

import struct
import zlib
from collections.abc import Callable, Iterable, Mapping, Sequence
from itertools import product
from operator import attrgetter, index
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.errors import StorageError
from daq.records import Reading
from daq.storage.layout import Column, columns

_TYPES = {"int64": "q", "float64": "d"}
_NAN = float("nan")
_GROUPED = ("values", "slices", "encoder_", "sensor_", "event_")


class Rows:
    """The form of a journal row for one run: `columns` flattened, channel by channel."""

    def __init__(self, meta: Mapping[str, Any]) -> None:
        self.columns: tuple[Column, ...] = columns(meta)
        self.names = tuple(name for column in self.columns for name in _flat_names(column))
        self._channels, self._slices = int(meta["channels"]), int(meta.get("slices", 0))
        self._axes, self._sensors = tuple(meta.get("axes", ())), tuple(meta.get("sensors", {}))
        plain = [column.name for column in self.columns if not column.name.startswith(_GROUPED)]
        self._plain = attrgetter(*plain)
        self._casts = tuple(_cast(column) for column in self.columns for _ in range(column.width))
        types = "".join(_TYPES[column.kind] * column.width for column in self.columns)
        self._packer = struct.Struct(f"<q{types}")
        self._no_variance = (_NAN,) * self._channels
        self._no_slices = ((-1,) * self._channels,) * self._slices

    def flat(self, reading: Reading, events: tuple[int, ...] = ()) -> tuple[Any, ...]:
        """Return a reading as numbers in the order of `names`; None where nothing was measured.

        In list mode `events` holds index of the first event and number of events.

        Raises
        ------
        StorageError
            For a reading that the columns of this run cannot hold.
        """
        try:
            parts = (*self._channel_parts(reading), *self._device_parts(reading), *events)
            raw = (*self._plain(reading), *parts)
            return tuple([cast(number) for cast, number in zip(self._casts, raw, strict=True)])
        except (TypeError, ValueError, KeyError, OverflowError) as error:
            raise StorageError(
                f"the reading does not fit the columns of this run ({error})",
                where=f"visit {reading.visit}, attempt {reading.attempt}",
                remedy="Compare the rig's channels, axes and sensors with those of the run",
            ) from error

    def crc(self, row: int, flat: Sequence[Any]) -> int:
        """Return the checksum of a row, bound to its number."""
        numbers = [_NAN if number is None else number for number in flat]
        try:
            return zlib.crc32(self._packer.pack(row, *numbers))
        except struct.error as error:
            raise StorageError(
                f"a number of the row is out of range ({error})", where=f"row {row}"
            ) from error

    def arrays(self, rows: Sequence[Sequence[Any]]) -> dict[str, NDArray[Any]]:
        """Return flat rows as one array a column."""
        by_name = {name: [row[place] for row in rows] for place, name in enumerate(self.names)}
        return {column.name: _array(column, by_name) for column in self.columns}

    def _channel_parts(self, reading: Reading) -> Iterable[float]:
        variances = self._no_variance if reading.values_var is None else reading.values_var
        slices = self._no_slices if reading.slices is None else reading.slices
        if len(slices) != self._slices:
            raise ValueError(f"{len(slices)} slices for {self._slices}")
        for part in (reading.values, variances, *slices):
            if len(part) != self._channels:
                raise ValueError(f"{len(part)} values for {self._channels} channels")
            yield from part

    def _device_parts(self, reading: Reading) -> Iterable[float]:
        _refuse_unknown(reading.encoder_mm, self._axes)
        _refuse_unknown(reading.sensors, self._sensors)
        for axis in self._axes:
            yield from reading.encoder_mm.get(axis, (_NAN, _NAN))
        for name in self._sensors:
            value, _unit, at_ns = reading.sensors.get(name, (_NAN, "", -1))
            yield value
            yield at_ns


def _flat_names(column: Column) -> Iterable[str]:
    places = product(*(range(length) for length in column.shape))
    return tuple("_".join((column.name, *map(str, place))) for place in places)


def _array(column: Column, by_name: Mapping[str, Sequence[Any]]) -> NDArray[Any]:
    parts = [np.array(by_name[name], dtype=column.kind) for name in _flat_names(column)]
    return np.stack(parts, axis=1).reshape(-1, *column.shape) if column.shape else parts[0]


def _cast(column: Column) -> Callable[[Any], int | float | None]:
    if column.name == "values" and column.kind == "int64":
        return _count
    return index if column.kind == "int64" else _real


def _real(value: Any) -> float | None:
    number = float(value)
    return number if number == number else None  # SQLite keeps NaN as NULL anyway


def _count(value: Any) -> int:
    number = int(value)
    if number != value or number < 0:
        raise ValueError(f"{value} is not a count")
    return number


def _refuse_unknown(given: Mapping[str, Any], known: Sequence[str]) -> None:
    unknown = given.keys() - set(known)
    if unknown:
        raise KeyError(f"no column for {', '.join(sorted(unknown))}")
