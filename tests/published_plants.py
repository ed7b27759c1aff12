"""The published benchmark plants, built from their family's formula, with their exact ultimate points.

The table `data/benchmark_plants.csv` lists the test batch of Astrom & Hagglund (J. Process Control 14:635-650,
2004; *Advanced PID Control*, ISA 2006, section 7.2; list from memory), their benchmark systems (IFAC PID'00,
Terrassa 2000; from memory) and textbook plants. Shared by tests and benchmarks.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import reduce
from pathlib import Path

import numpy as np

from gainwright.models import TransferFunction

TABLE = Path(__file__).resolve().parent / "data" / "benchmark_plants.csv"

CROSSES_TWICE = "B7_condstable_crossing2"
"""A row that gives the second crossing of a plant already in the table; left out of `published_plants`."""


@dataclass(frozen=True, slots=True)
class PublishedPlant:
    """One plant: its name and family, the transfer function, and its ultimate point (infinite gain: none)."""

    name: str
    family: str
    process: TransferFunction
    ultimate_gain: float
    ultimate_period: float


def lags(*times: float) -> tuple[float, ...]:
    """Denominator of a product of lags, descending powers of s."""
    product = reduce(np.polymul, ([time, 1.0] for time in times), np.array([1.0]))
    return tuple(float(c) for c in product)


def _integrated(denominator: tuple[float, ...]) -> tuple[float, ...]:
    return (*denominator, 0.0)


def _times(*factors: tuple[float, ...]) -> tuple[float, ...]:
    return tuple(float(c) for c in reduce(np.polymul, factors, np.array([1.0])))


def _four_lags(a: float) -> TransferFunction:
    return TransferFunction((1.0,), lags(1, a, a**2, a**3))


def _inverse_response(a: float) -> TransferFunction:
    return TransferFunction((-a, 1.0), lags(1, 1, 1))


def _conditionally_stable() -> TransferFunction:
    return TransferFunction(_times((1, 6), (1, 6)), _integrated(_times((1, 1), (1, 1), (1, 36))), 0.0)


def _fast_and_slow() -> TransferFunction:
    # 100/(s+10)^2 (1/(s+1) + 0.5/(s+0.05)) over one denominator.
    numerator = 100.0 * np.polyadd([1.0, 0.05], [0.5, 0.5])
    return TransferFunction(tuple(float(c) for c in numerator), _times((1, 10), (1, 10), (1, 1), (1, 0.05)), 0.0)


Parameters = dict[str, float]

FAMILIES: dict[str, Callable[[Parameters], TransferFunction]] = {
    "P1": lambda p: TransferFunction((1.0,), lags(p["T"]), 1.0),
    "P2": lambda p: TransferFunction((1.0,), lags(p["T"], p["T"]), 1.0),
    "P3": lambda p: TransferFunction((1.0,), lags(1, p["T"], p["T"])),
    "P4": lambda p: TransferFunction((1.0,), lags(*[1.0] * int(p["n"]))),
    "P5": lambda p: _four_lags(p["alpha"]),
    "P6": lambda p: TransferFunction((1.0,), _integrated(lags(p["T1"])), p["L1"]),
    "P7": lambda p: TransferFunction((1.0,), lags(p["T"], *([p["T1"]] if p["T1"] else [])), p["L1"]),
    "P8": lambda p: _inverse_response(p["alpha"]),
    "P9": lambda p: TransferFunction((1.0,), _times((1, 1), (p["T"] ** 2, 1.4 * p["T"], 1.0))),
    "B2000-1": lambda p: TransferFunction((1.0,), lags(*[1.0] * int(p["n"]))),
    "B2000-2": lambda p: _four_lags(p["alpha"]),
    "B2000-3": lambda p: _inverse_response(p["alpha"]),
    "B2000-4": lambda p: TransferFunction((1.0,), lags(p["T"]), 1.0),
    "B2000-5": lambda p: TransferFunction((1.0,), lags(p["T"], p["T"]), 1.0),
    "B2000-6": lambda _: _fast_and_slow(),
    "B2000-7": lambda _: _conditionally_stable(),
    "B2000-8": lambda p: TransferFunction(
        (p["w0"] ** 2,), _times((1, 1), (1.0, 2 * p["zeta"] * p["w0"], p["w0"] ** 2))
    ),
    "FOPDT": lambda p: TransferFunction((1.0,), lags(p["T"]), p["L"]),
    "IPDT": lambda p: TransferFunction((p["Kv"],), (1.0, 0.0), p["L"]),
    "Wood-Berry 1973 g11": lambda p: TransferFunction((p["K"],), lags(p["T"]), p["L"]),
    "Wood-Berry as in Luyben 1987": lambda p: TransferFunction((p["K"],), lags(p["T"]), p["L"]),
    "Wood-Berry 1973 g22": lambda p: TransferFunction((p["K"],), lags(p["T"]), p["L"]),
}

SINGLE: dict[str, TransferFunction] = {
    "TB_Seborg_2es_10_5": TransferFunction((2.0,), lags(10, 5), 1.0),
    "TB_Seborg_4e35_7": TransferFunction((4.0,), lags(7), 3.5),
    "TB_Seborg_5_2_1": TransferFunction((1.0,), lags(5, 2, 1)),
    "TB_Marlin_3tank": TransferFunction((0.039,), lags(5, 5, 5)),
    "TB_Purdue_2_4_6": TransferFunction((6.0,), lags(2, 4, 6)),
    "TB_NotreDame_5_4": TransferFunction((0.2,), (1.0, 1.5, 1.0), 1.0),
    "TB_pole124": TransferFunction((1.0,), _times((1, 1), (1, 2), (1, 4))),
}


def published_plants() -> tuple[PublishedPlant, ...]:
    """Every plant of the table, once; those without a crossover have an infinite ultimate gain."""
    with TABLE.open(encoding="utf-8", newline="") as file:
        rows = {row["name"]: row for row in csv.DictReader(file)}
    return tuple(_plant(row) for name, row in rows.items() if name != CROSSES_TWICE)


def crossing_plants() -> tuple[PublishedPlant, ...]:
    """The plants with a finite crossover, which a relay test can find."""
    return tuple(plant for plant in published_plants() if math.isfinite(plant.ultimate_gain))


def _plant(row: dict[str, str]) -> PublishedPlant:
    family = row["family"].split(":")[0].split("(s")[0].strip()
    name = row["name"]
    process = SINGLE[name] if name in SINGLE else FAMILIES[family](_parameters(row["parameters"]))
    gain = float(row["Ku"])
    return PublishedPlant(name, family, process, gain, float(row["Tu"]) if math.isfinite(gain) else math.inf)


def _parameters(text: str) -> Parameters:
    return {key: float(value) for key, _, value in (part.partition("=") for part in text.split(",") if part)}
