"""The dye house's loops: invented processes, their devices, and the documents that register them.

Owns the scenario's numbers. All times are real seconds, short so that a test takes half a minute.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

from gainwright.margins import ultimate_point
from gainwright.models import TransferFunction

PROCESS_VARIABLE, OUTPUT, SETPOINT, MODE, HEARTBEAT, RESTING, FIRED, GAINS = 0, 0, 2, 10, 20, 22, 24, 30
MANUAL, AUTOMATIC = 0, 1


@dataclass(frozen=True, slots=True)
class RigLoop:
    """One loop of the dye house.

    Parameters
    ----------
    tag, description : str
    device_id : int
    transfer_function : TransferFunction
        Output percent to PV units.
    unit : str
    low, high : float
        Range of the process variable.
    resting_output, resting_value : float
    noise, quantum : float, PV units
    stick : float
        Percent that the final element sticks before it moves; 0 where it is healthy.
    sample_interval_s : float
    deviation : float, PV units
        What a test may deviate, both ways.
    max_amplitude : float, percent
    watchdog : {"hold_last", "resting", "fixed"}
    watchdog_s : float
    fixed_value : float or None
    effect : {"raises", "lowers"}
    output_format, value_format : str
        Register formats.
    word_order : str
    gain, integral_s : float
        As-found gains of the PI controller, percent per percent and seconds.
    mode : int
        As found.
    """

    tag: str
    description: str
    device_id: int
    transfer_function: TransferFunction
    unit: str
    low: float
    high: float
    resting_output: float
    resting_value: float
    noise: float
    quantum: float
    deviation: float
    max_amplitude: float
    sample_interval_s: float = 0.1
    stick: float = 0.0
    watchdog: Literal["hold_last", "resting", "fixed"] = "resting"
    watchdog_s: float = 3.0
    fixed_value: float | None = None
    effect: Literal["raises", "lowers"] = "raises"
    value_format: str = "float32"
    output_format: str = "float32"
    word_order: str = "big"
    gain: float = 0.8
    integral_s: float = 6.0
    mode: int = MANUAL

    @property
    def span(self) -> float:
        """Width of the process variable's range."""
        return self.high - self.low

    def register(self, address: int, table: str, kind: str, low: float, span: float) -> dict[str, Any]:
        """A register's declaration; integers carry the range in 30,000 steps."""
        document: dict[str, Any] = {
            "table": table,
            "address": address,
            "format": kind,
            "word_order": self.word_order if kind == "float32" else "big",
        }
        if kind != "float32":
            document |= {"scale": span / 30000, "offset": low}
        return document

    def definition(self, host: str, port: int) -> dict[str, Any]:
        """The document that registers the loop with the service."""
        beat: dict[str, Any] = {"address": HEARTBEAT, "watchdog": self.watchdog, "timeout_s": self.watchdog_s}
        if self.watchdog == "resting":
            beat["resting_address"] = RESTING
        if self.fixed_value is not None:
            beat["fixed_value"] = self.fixed_value
        gains = [self.register(GAINS + 2 * k, "holding", "float32", 0, 1) for k in range(2)]
        return {
            "tag": self.tag,
            "description": self.description,
            "site": "local",
            "class": "bench",
            "safety_function": False,
            "adapter": {
                "kind": "modbus",
                "host": host,
                "port": port,
                "device_id": self.device_id,
                "process_variable": self.register(PROCESS_VARIABLE, "input", self.value_format, self.low, self.span),
                "controller_output": self.register(OUTPUT, "holding", self.output_format, 0.0, 100.0),
                "setpoint": self.register(SETPOINT, "holding", "float32", 0, 1),
                "mode": {"address": MODE, "manual": MANUAL, "automatic": AUTOMATIC},
                "heartbeat": beat,
                "gains": {"gain": gains[0], "integral": gains[1]},
            },
            "process_variable": {"unit": self.unit, "low": self.low, "high": self.high},
            "controller_output": {"unit": "%", "low": 0, "high": 100},
            "output_effect": self.effect,
            "sample_interval_s": self.sample_interval_s,
            "limits": {
                "process_variable_low": max(self.low, self.resting_value - 4 * self.deviation),
                "process_variable_high": min(self.high, self.resting_value + 4 * self.deviation),
                "deviation_up": self.deviation,
                "deviation_down": self.deviation,
                "output_low": 10,
                "output_high": 90,
                "max_amplitude": self.max_amplitude,
                "max_output_change": 2 * self.max_amplitude,
                "max_duration_s": 600,
                "max_switches": 40,
            },
            "exit_action": {"kind": "as_found"},
            "integral_follows_in_manual": True,
            "setpoint_follows_in_manual": False,
            "controller": {
                "form": "ideal",
                "gain": "percent_per_percent",
                "integral_unit": "s",
                "derivative_unit": "s",
                "input_low": self.low,
                "input_high": self.high,
                "output_low": 0,
                "output_high": 100,
                "derivative_filter_n": 10,
                "derivative_on": "process_variable",
                "sample_interval_s": self.sample_interval_s,
            },
        }

    def truth(self) -> dict[str, float]:
        """The process's own ultimate gain (percent per PV unit) and period (seconds)."""
        gain, period = ultimate_point(self.transfer_function)
        return {"ultimate_gain": gain, "ultimate_period_s": period}


def _lags(gain: float, *time_constants: float, dead_time: float = 0.0) -> TransferFunction:
    denominator = [1.0]
    for lag in time_constants:
        denominator = [
            lag * a + b for a, b in zip([*denominator, 0.0], [0.0, *denominator], strict=True)
        ]  # fmt: skip
    return TransferFunction((gain,), tuple(denominator), dead_time)


DYE_HOUSE: tuple[RigLoop, ...] = (
    RigLoop(
        tag="TIC-201",
        description="dye-bath temperature, steam valve",
        device_id=1,
        transfer_function=_lags(1.1, 4.0, 0.7, dead_time=0.5),
        unit="degC",
        low=0.0,
        high=120.0,
        resting_output=45.0,
        resting_value=60.0,
        noise=0.015,
        quantum=0.005,
        deviation=3.0,
        max_amplitude=8.0,
        sample_interval_s=0.05,
        gain=1.6,
    ),
    RigLoop(
        tag="FIC-105",
        description="circulation flow",
        device_id=2,
        transfer_function=_lags(0.9, 0.7, 0.3, dead_time=0.4),
        unit="m3/h",
        low=0.0,
        high=60.0,
        resting_output=50.0,
        resting_value=30.0,
        noise=0.12,
        quantum=0.0,
        deviation=6.0,
        max_amplitude=8.0,
        sample_interval_s=0.04,
        watchdog="hold_last",
        value_format="int16",
        output_format="uint16",
        gain=0.3,
        integral_s=0.8,
    ),
    RigLoop(
        tag="LIC-310",
        description="surge-tank level, outflow valve",
        device_id=3,
        transfer_function=TransferFunction((-0.35,), (0.3, 1.0, 0.0), 0.7),
        unit="%",
        low=0.0,
        high=100.0,
        resting_output=55.0,
        resting_value=50.0,
        noise=0.06,
        quantum=0.02,
        deviation=6.0,
        max_amplitude=6.0,
        effect="lowers",
        word_order="little",
        gain=1.5,
        integral_s=20.0,
    ),
    RigLoop(
        tag="SIC-410",
        description="winder speed, bench drive",
        device_id=4,
        transfer_function=_lags(12.0, 1.0, 0.15, dead_time=0.16),
        unit="1/min",
        low=0.0,
        high=1500.0,
        resting_output=60.0,
        resting_value=720.0,
        noise=0.6,
        quantum=0.1,
        deviation=60.0,
        max_amplitude=6.0,
        sample_interval_s=0.02,
        watchdog="fixed",
        watchdog_s=2.0,
        fixed_value=60.0,
        gain=0.4,
        integral_s=0.6,
    ),
    RigLoop(
        tag="PIC-620",
        description="receiver pressure, sticking valve",
        device_id=5,
        transfer_function=_lags(0.05, 2.5, 0.8, dead_time=0.5),
        unit="bar",
        low=0.0,
        high=10.0,
        resting_output=40.0,
        resting_value=4.0,
        noise=0.001,
        quantum=0.0005,
        deviation=0.4,
        max_amplitude=8.0,
        stick=2.5,
        gain=1.2,
        integral_s=8.0,
    ),
)
