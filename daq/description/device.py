"""Device: one entry of [devices] in a rig file, which driver speaks to it, and where."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Literal

from pydantic import Field, model_validator

from daq.description.address import Address
from daq.description.dialect import Dialect
from daq.description.problems import NotNegative, Positive, Table


class Register(Table):
    """A quantity in the registers of a Modbus device: value = offset + factor * number."""

    at: Annotated[int, Field(ge=0, le=65535)]
    kind: Literal["u16", "i16", "u32", "i32", "f32"] = "u16"
    table: Literal["input", "holding"] = "input"
    unit: str
    factor: float = 1.0
    offset: float = 0.0


class DeviceEntry(Table):
    """A device: which driver speaks to it, and where.

    `dialect` is a path beside the rig file; whoever reads the file puts the dialect itself there.
    """

    driver: str
    dialect: Dialect | None = None
    address: Address
    timeout_s: Positive = 1.0
    every_s: Positive = 60.0
    readout_s: NotNegative = 0.0
    shortest_gate_s: NotNegative = 0.0
    channels: Annotated[int, Field(ge=1, le=64)] = 1
    slices: Annotated[int, Field(ge=0, le=1000)] = 0
    unit: Annotated[int, Field(ge=0, le=247)] = 1
    registers: Mapping[str, Register] = {}
    late_s: NotNegative = 1.5
    stream: Address | None = None
    word_bits: Literal[32, 64] = 32
    tick_s: Annotated[float, Field(gt=0, le=1)] = 1e-9

    @model_validator(mode="after")
    def _dialect_belongs(self) -> DeviceEntry:
        if (self.driver == "dialect") != (self.dialect is not None):
            raise ValueError("the driver 'dialect', and no other, needs a dialect file")
        if (self.driver == "modbus-sensor") != bool(self.registers):
            raise ValueError("the driver 'modbus-sensor', and no other, needs registers")
        if (self.driver == "list-mode-counter") != (self.stream is not None):
            raise ValueError("the driver 'list-mode-counter', and no other, needs the address of its stream")
        return self
