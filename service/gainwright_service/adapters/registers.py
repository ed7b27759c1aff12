"""Registers and numbers: the one place where raw Modbus words become engineering values and back."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal

from pymodbus.client.mixin import ModbusClientMixin

from gainwright_service.errors import DeviceNonsensical, DeviceRefused
from gainwright_wire.loops import Register

DATATYPES = {
    "float32": ModbusClientMixin.DATATYPE.FLOAT32,
    "int16": ModbusClientMixin.DATATYPE.INT16,
    "uint16": ModbusClientMixin.DATATYPE.UINT16,
}
WORDS = {"float32": 2, "int16": 1, "uint16": 1}
LIMITS = {"int16": (-32768, 32767), "uint16": (0, 65535)}


def words_of(register: Register) -> int:
    """How many registers the value takes."""
    return WORDS[register.format]


def quantum_of(register: Register) -> float:
    """Smallest step of the value in engineering units; 0 for floating point."""
    return 0.0 if register.format == "float32" else abs(register.scale)


def decoded(register: Register, words: Sequence[int], name: str) -> float:
    """Engineering value of raw words.

    Raises
    ------
    DeviceNonsensical
        Where it is not a finite number.
    """
    raw = ModbusClientMixin.convert_from_registers(list(words), DATATYPES[register.format], word_order=_order(register))
    if not isinstance(raw, int | float) or not math.isfinite(raw):
        raise DeviceNonsensical(f"{name}: the device gives {raw}, which is no number")
    return float(raw) * register.scale + register.offset


def encoded(register: Register, value: float, name: str) -> list[int]:
    """Raw words of an engineering value, rounded to the register's quantum.

    Raises
    ------
    DeviceRefused
        Where the register cannot hold it.
    """
    raw = (value - register.offset) / register.scale
    if register.format == "float32":
        return ModbusClientMixin.convert_to_registers(raw, DATATYPES["float32"], word_order=_order(register))
    low, high = LIMITS[register.format]
    count = round(raw)
    if not low <= count <= high:
        raise DeviceRefused(
            f"{name}: {value:g} does not fit the register ({register.format}, scale {register.scale:g})"
        )
    return ModbusClientMixin.convert_to_registers(count, DATATYPES[register.format], word_order=_order(register))


def _order(register: Register) -> Literal["big", "little"]:
    return register.word_order
