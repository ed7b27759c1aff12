"""A loop on the wire: what it is, how it is reached, what a test may do to it. Stored as it is."""

from __future__ import annotations

from collections.abc import Iterator
from enum import StrEnum
from typing import Annotated, Literal

from pydantic import Field, model_validator
from pydantic_core import PydanticCustomError

from gainwright_wire.base import Finite, Flag, LongText, NonNegative, Positive, ShortText, Site, Tag, Wire

Seconds = Annotated[float, Field(strict=True, gt=0, le=86400, allow_inf_nan=False)]


class LoopClass(StrEnum):
    """`plant` carries the whole checklist; `bench` the light path."""

    BENCH = "bench"
    PLANT = "plant"


class Range(Wire):
    """A signal's unit and range."""

    unit: ShortText
    low: Finite
    high: Finite

    @model_validator(mode="after")
    def _ordered(self) -> Range:
        if not self.low < self.high:
            raise PydanticCustomError("range_reversed", "low must be below high")
        return self

    @property
    def span(self) -> float:
        """Width of the range, in its unit."""
        return self.high - self.low


class Register(Wire):
    """One value in a Modbus device: raw * scale + offset."""

    table: Literal["input", "holding"]
    address: Annotated[int, Field(strict=True, ge=0, le=65535)]
    format: Literal["float32", "int16", "uint16"] = "float32"
    word_order: Literal["big", "little"] = "big"
    scale: Annotated[float, Field(strict=True, allow_inf_nan=False, ge=-1e9, le=1e9)] = 1.0
    offset: Finite = 0.0

    @model_validator(mode="after")
    def _fits(self) -> Register:
        if self.scale == 0:
            raise PydanticCustomError("scale_zero", "scale must not be zero")
        if self.format == "float32" and self.address == 65535:
            raise PydanticCustomError("address_range", "a float32 takes two registers: address at most 65534")
        return self


class ModeRegister(Wire):
    """The register that selects manual or automatic, and the codes it uses."""

    table: Literal["holding"] = "holding"
    address: Annotated[int, Field(strict=True, ge=0, le=65535)]
    manual: Annotated[int, Field(strict=True, ge=0, le=65535)] = 0
    automatic: Annotated[int, Field(strict=True, ge=0, le=65535)] = 1
    cascade: Annotated[int, Field(strict=True, ge=0, le=65535)] | None = None

    @model_validator(mode="after")
    def _distinct(self) -> ModeRegister:
        codes = [c for c in (self.manual, self.automatic, self.cascade) if c is not None]
        if len(set(codes)) != len(codes):
            raise PydanticCustomError("mode_codes", "the codes of manual, automatic and cascade must differ")
        return self


class WatchdogAction(StrEnum):
    """What a device does with its output when the beats stop."""

    NONE = "none"
    HOLD_LAST = "hold_last"
    RESTING = "resting"
    FIXED = "fixed"


class HeartbeatRegister(Wire):
    """The register that the test beats, and what the device does when the beats stop."""

    table: Literal["holding"] = "holding"
    address: Annotated[int, Field(strict=True, ge=0, le=65535)]
    watchdog: WatchdogAction
    timeout_s: Seconds
    resting_address: Annotated[int, Field(strict=True, ge=0, le=65534)] | None = None
    """Where the device takes the resting output from (float32), for `resting`; None where it latches it itself."""
    fixed_value: Finite | None = None

    @model_validator(mode="after")
    def _complete(self) -> HeartbeatRegister:
        if (self.watchdog is WatchdogAction.FIXED) != (self.fixed_value is not None):
            raise PydanticCustomError("watchdog_value", "fixed_value is given for watchdog 'fixed' and only then")
        return self


class GainRegisters(Wire):
    """Where the controller's gains stand, in the controller's own form and units."""

    gain: Register
    integral: Register
    derivative: Register | None = None


class ModbusTcp(Wire):
    """A loop in a Modbus TCP device."""

    kind: Literal["modbus"]
    host: Annotated[str, Field(min_length=1, max_length=253, pattern=r"^[A-Za-z0-9.:_-]+$")]
    port: Annotated[int, Field(strict=True, ge=1, le=65535)] = 502
    device_id: Annotated[int, Field(strict=True, ge=1, le=255)] = 1
    """0 is everybody on a gateway, and never a loop."""
    timeout_s: Annotated[float, Field(strict=True, gt=0, le=1.0, allow_inf_nan=False)] = 0.5
    process_variable: Register
    controller_output: Register
    setpoint: Register | None = None
    mode: ModeRegister | None = None
    heartbeat: HeartbeatRegister | None = None
    gains: GainRegisters | None = None

    @model_validator(mode="after")
    def _writable(self) -> ModbusTcp:
        if self.controller_output.table != "holding":
            raise PydanticCustomError("output_table", "controller_output must be in the holding table to be written")
        self._check_overlap()
        return self

    def _check_overlap(self) -> None:
        """No two registers that are written, and none of them and the process variable, share a word."""
        found = [(name, table, first, words) for name, table, first, words in self._spans()]
        for k, (name, table, first, words) in enumerate(found):
            for other, other_table, other_first, other_words in found[k + 1 :]:
                if table == other_table and first < other_first + other_words and other_first < first + words:
                    raise PydanticCustomError(
                        "registers_overlap",
                        "{one} and {other} share a register: each needs its own",
                        {"one": name, "other": other},
                    )

    def _spans(self) -> Iterator[tuple[str, str, int, int]]:
        for name in ("process_variable", "controller_output"):
            register: Register = getattr(self, name)
            yield name, register.table, register.address, 2 if register.format == "float32" else 1
        if self.mode is not None:
            yield "mode", self.mode.table, self.mode.address, 1
        if self.heartbeat is not None:
            yield "heartbeat", self.heartbeat.table, self.heartbeat.address, 1
            if self.heartbeat.resting_address is not None:
                yield "heartbeat.resting_address", self.heartbeat.table, self.heartbeat.resting_address, 2
        for name in ("gain", "integral", "derivative") if self.gains is not None else ():
            gain: Register | None = getattr(self.gains, name)
            if gain is not None:
                yield f"gains.{name}", gain.table, gain.address, 2 if gain.format == "float32" else 1


class SimulatedPlant(Wire):
    """A simulated process: gain N(s)/D(s) exp(-L s), for rehearsals and tests."""

    kind: Literal["simulated"]
    numerator: Annotated[tuple[Finite, ...], Field(min_length=1, max_length=12)]
    denominator: Annotated[tuple[Finite, ...], Field(min_length=1, max_length=12)]
    dead_time_s: NonNegative = 0.0
    noise: NonNegative = 0.0
    quantum: NonNegative = 0.0
    seed: Annotated[int, Field(strict=True, ge=0, le=2**31 - 1)] = 0
    resting_output: Finite = 50.0
    resting_process_variable: Finite = 50.0
    starts_in: Literal["manual", "automatic"] = "manual"


Adapter = Annotated[ModbusTcp | SimulatedPlant, Field(discriminator="kind")]


class Limits(Wire):
    """What a test must stay inside. Optional ones default by class; the plan shows what was taken."""

    process_variable_low: Finite
    process_variable_high: Finite
    deviation_up: Positive | None = None
    deviation_down: Positive | None = None
    output_low: Finite
    output_high: Finite
    max_amplitude: Positive | None = None
    max_output_change: Positive | None = None
    output_rate_per_s: Positive | None = None
    max_duration_s: Seconds | None = None
    max_switches: Annotated[int, Field(strict=True, ge=4, le=1000)] | None = None
    min_dwell_s: NonNegative = 0.0
    max_switches_per_hour: Annotated[int, Field(strict=True, ge=4, le=100000)] | None = None
    max_switches_per_day: Annotated[int, Field(strict=True, ge=4, le=1000000)] | None = None

    @model_validator(mode="after")
    def _ordered(self) -> Limits:
        if not self.process_variable_low < self.process_variable_high:
            raise PydanticCustomError("limits_reversed", "process_variable_low must be below process_variable_high")
        if not self.output_low < self.output_high:
            raise PydanticCustomError("limits_reversed", "output_low must be below output_high")
        return self


class ExitAction(Wire):
    """What is done with the output when a test ends."""

    kind: Literal["as_found", "resting", "fixed"]
    value: Finite | None = None

    @model_validator(mode="after")
    def _complete(self) -> ExitAction:
        if (self.kind == "fixed") != (self.value is not None):
            raise PydanticCustomError("exit_value", "value is given for exit_action 'fixed' and only then")
        return self


class Controller(Wire):
    """The target controller's form, units and ranges."""

    form: Literal["ideal", "parallel"]
    gain: Literal["percent_per_percent", "engineering"]
    integral_unit: Literal["s", "min"] = "s"
    derivative_unit: Literal["s", "min"] = "s"
    input_low: Finite | None = None
    input_high: Finite | None = None
    output_low: Finite | None = None
    output_high: Finite | None = None
    derivative_filter_n: Annotated[float, Field(strict=True, ge=1, le=100, allow_inf_nan=False)] = 10.0
    derivative_on: Literal["process_variable", "error"] = "process_variable"
    sample_interval_s: Seconds | None = None

    @model_validator(mode="after")
    def _ranges(self) -> Controller:
        for low, high, name in (
            (self.input_low, self.input_high, "input"),
            (self.output_low, self.output_high, "output"),
        ):
            if (low is None) != (high is None):
                raise PydanticCustomError(
                    "range_half", "give both or none of {name}_low and {name}_high", {"name": name}
                )
            if low is not None and high is not None and not low < high:
                raise PydanticCustomError("range_reversed", "{name}_low must be below {name}_high", {"name": name})
        return self


class Witness(Wire):
    """A neighbour's variable watched during a test."""

    tag: Tag
    low: Finite
    high: Finite


class Loop(Wire):
    """One PID loop, as registered and as stored."""

    tag: Tag
    description: ShortText = ""
    site: Site = "local"
    loop_class: Annotated[LoopClass, Field(alias="class")] = LoopClass.PLANT
    safety_function: Flag = False
    adapter: Adapter
    process_variable: Range
    controller_output: Range
    output_effect: Literal["raises", "lowers"]
    sample_interval_s: Annotated[float, Field(strict=True, ge=0.01, le=60, allow_inf_nan=False)] = 0.1
    limits: Limits
    exit_action: ExitAction
    integral_follows_in_manual: Flag | None = None
    setpoint_follows_in_manual: Flag | None = None
    attended_integrating_hold: Flag = False
    interaction_groups: Annotated[tuple[Tag, ...], Field(max_length=20)] = ()
    witnesses: Annotated[tuple[Witness, ...], Field(max_length=20)] = ()
    controller: Controller | None = None
    notes: LongText = ""

    @model_validator(mode="after")
    def _consistent(self) -> Loop:
        if self.safety_function:
            raise PydanticCustomError(
                "safety_function",
                "safety_function: a loop that is part of a safety function is never tested; there is no override",
            )
        self._check_limits()
        self._check_unenforced()
        self._check_class()
        return self

    def _check_limits(self) -> None:
        limits, pv, out = self.limits, self.process_variable, self.controller_output
        if not (pv.low <= limits.process_variable_low and limits.process_variable_high <= pv.high):
            raise PydanticCustomError(
                "limits_outside_range",
                "limits.process_variable_low/high must lie inside process_variable.low/high",
            )
        if not (out.low <= limits.output_low and limits.output_high <= out.high):
            raise PydanticCustomError(
                "limits_outside_range", "limits.output_low/high must lie inside controller_output.low/high"
            )
        half_band = (limits.output_high - limits.output_low) / 2
        if limits.max_amplitude is not None and limits.max_amplitude > half_band:
            raise PydanticCustomError(
                "amplitude_outside_band", "limits.max_amplitude must be at most half of the output band"
            )
        value = self.exit_action.value
        if value is not None and not out.low <= value <= out.high:
            raise PydanticCustomError(
                "exit_outside_range", "exit_action.value must lie inside controller_output.low/high"
            )

    def _check_class(self) -> None:
        adapter = self.adapter
        if not isinstance(adapter, ModbusTcp):
            return
        if self.loop_class is LoopClass.PLANT and adapter.mode is None:
            raise PydanticCustomError(
                "class_contradiction",
                "adapter.mode: class 'plant' needs a mode register; a loop without one is allowed on 'bench' only",
            )
        self._check_watchdog(adapter.heartbeat)

    def _check_unenforced(self) -> None:
        """What nothing keeps yet is refused: a limit that somebody trusts must be one."""
        limits = self.limits
        declared = {
            "limits.max_switches_per_hour": limits.max_switches_per_hour is not None,
            "limits.max_switches_per_day": limits.max_switches_per_day is not None,
            "witnesses": bool(self.witnesses),
            "attended_integrating_hold": self.attended_integrating_hold,
        }
        for name, given in declared.items():
            if given:
                raise PydanticCustomError(
                    "not_enforced", "{name} is not watched by this version: leave it out", {"name": name}
                )

    def _check_watchdog(self, beat: HeartbeatRegister | None) -> None:
        if beat is None:
            return
        out, exit_action = self.controller_output, self.exit_action
        if beat.fixed_value is not None and not out.low <= beat.fixed_value <= out.high:
            raise PydanticCustomError(
                "watchdog_contradiction", "adapter.heartbeat.fixed_value must lie inside controller_output.low/high"
            )
        if beat.timeout_s < 4 * self.sample_interval_s:
            raise PydanticCustomError(
                "watchdog_contradiction",
                "adapter.heartbeat.timeout_s must be at least four times sample_interval_s: beats come with samples",
            )
        if exit_action.kind == "fixed" and beat.watchdog is WatchdogAction.RESTING:
            raise PydanticCustomError(
                "watchdog_contradiction",
                "adapter.heartbeat.watchdog 'resting' contradicts exit_action 'fixed': both must end at one value",
            )
        if (
            beat.watchdog is WatchdogAction.FIXED
            and self.exit_action.kind == "fixed"
            and beat.fixed_value != self.exit_action.value
        ):
            raise PydanticCustomError(
                "watchdog_contradiction", "adapter.heartbeat.fixed_value must equal exit_action.value"
            )


class RegisteredLoop(Wire):
    """A loop as the service keeps it."""

    loop: Loop
    version: int
    registered_at: str
    registered_by: str
    updated_at: str


class LoopPage(Wire):
    """One page of loops; `next` is the cursor of the following page, None on the last."""

    items: tuple[RegisteredLoop, ...]
    next: str | None = None
