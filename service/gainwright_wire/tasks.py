"""Tasks on the wire: forecasts, experiments, their progress, samples and outcomes."""

from __future__ import annotations

from enum import StrEnum
from typing import Annotated, Any, Literal

from pydantic import Field

from gainwright_wire.analyses import AnalysisReply, Checklist, Finding, Grade, Model, Proposal, RefusedRule
from gainwright_wire.base import Finite, Flag, Interval, LongText, NonNegative, Positive, ShortText, Stated, Wire

BENCH_SENTENCE = (
    "Worst case, the output stays anywhere in its band until somebody notices: nothing is damaged and nobody is hurt."
)
"""What a person signs before a test of class `bench`; it replaces what only a plant needs."""


class TaskState(StrEnum):
    """Where a task stands in the queue."""

    QUEUED = "queued"
    RUNNING = "running"
    FINISHED = "finished"


class Phase(StrEnum):
    """Where an experiment stands."""

    LISTENING = "listening"
    PROBING = "probing"
    SWINGING = "swinging"
    RETURNING = "returning"
    FINISHED = "finished"


class Outcome(StrEnum):
    """How an experiment ended."""

    COMPLETED = "completed"
    STOPPED = "stopped"
    LIMITED = "limited"
    YIELDED = "yielded"
    LOST = "lost"
    INTERRUPTED = "interrupted"


class Exit(StrEnum):
    """What became of the exit action."""

    PENDING = "pending"
    VERIFIED = "verified"
    UNVERIFIED = "unverified"
    NOT_WRITTEN = "not_written"
    NOT_OURS = "not_ours"


class Answer(Wire):
    """A person's answer to one checklist item; a caution needs a reason."""

    verdict: Literal["pass", "caution", "fail"]
    reason: ShortText = ""


class StartExperiment(Wire):
    """What a person says when starting a test."""

    attended: Flag
    bench_sentence_signed: Flag = False
    resting_output: Finite | None = None
    reference: Finite | None = None
    precision_percent: Annotated[float, Field(strict=True, ge=1, le=50, allow_inf_nan=False)] | None = None
    scored_cycles: Annotated[int, Field(strict=True, ge=2, le=20)] | None = None
    answers: dict[Annotated[str, Field(pattern=r"^B[0-9]{1,2}$")], Answer] = {}
    approver: Stated | None = None
    acknowledged_by: Stated | None = None
    work_order: Stated | None = None
    comment: LongText = ""


class ForecastRequest(Wire):
    """What is guessed of the loop where nothing is measured yet; moves nothing."""

    static_gain: Finite | None = None
    time_constant_s: Positive | None = None
    dead_time_s: Positive | None = None
    noise: NonNegative | None = None
    resting_output: Finite | None = None
    reference: Finite | None = None


class Plan(Wire):
    """What an experiment will do: every default that was taken, in engineering units."""

    sample_interval_s: Positive
    listening_s: Positive
    start_amplitude: Positive
    max_amplitude: Positive
    growth: Positive
    output_low: Finite
    output_high: Finite
    max_output_change: Positive
    output_rate_per_s: Positive | None
    deviation_up: Positive
    deviation_down: Positive
    process_variable_low: Finite
    process_variable_high: Finite
    max_duration_s: Positive
    max_switches: int
    min_dwell_s: NonNegative
    scored_cycles: int
    precision_percent: Positive
    exit_action: ShortText
    exit_value: Finite | None
    exit_valid_s: Positive


class Forecast(Wire):
    """The predicted swing, time, switches and cost of a test, before anything moves."""

    tag: str
    basis: Literal["limits", "listening", "history", "guess"]
    plan: Plan
    worst_swing: Positive | None
    worst_deviation: Positive
    period_s: Positive | None
    time_to_finish_s: Positive
    switches: int
    output_travel: NonNegative
    integrated_deviation: NonNegative | None
    cautions: tuple[str, ...]
    exit_action: str
    how_to_stop: str
    watchdog: str
    checklist: Checklist
    notice: str


class Progress(Wire):
    """What is known while a test runs."""

    samples: int = 0
    elapsed_s: NonNegative = 0.0
    switches: int = 0
    cycles: int = 0
    scored_cycles: int = 0
    amplitude: NonNegative | None = None
    hysteresis: NonNegative | None = None
    noise: NonNegative | None = None
    reference: Finite | None = None
    resting_output: Finite | None = None
    swing: NonNegative | None = None
    period_s: Positive | None = None
    provisional_ultimate_gain: Positive | None = None
    worst_deviation: NonNegative | None = None
    message: str = ""


class StreamProgress(Progress):
    """Progress as the live stream tells it, with the phase it belongs to."""

    phase: Phase | None = None


class LimitMet(Wire):
    """The limit that ended a test: its item of the safety list, the number and the bound."""

    item: str
    number: Finite
    bound: Finite
    unit: str = ""
    sentence: str = ""


class GainsFound(Wire):
    """The controller's gains as found, in its own form and units."""

    gain: Finite
    integral: Finite
    derivative: Finite | None = None


class AsFound(Wire):
    """What was found before the first write; `gains` is null where the device does not tell them."""

    mode: str
    setpoint: Finite | None
    controller_output: Finite
    process_variable: Finite
    resting_output: Finite
    reference: Finite
    gains: GainsFound | None = None


class TaskProblem(Wire):
    """Why a task could not do its work."""

    code: str
    detail: str
    context: dict[str, Any] = {}


class Experiment(Wire):
    """One run of the relay test, queued, running or finished."""

    id: str
    tag: str
    site: str
    state: TaskState
    phase: Phase | None
    outcome: Outcome | None
    exit: Exit
    exit_detail: str
    exit_acknowledged_by: str | None
    requested_by: str
    created_at: str
    started_at: str | None
    finished_at: str | None
    stop_requested_by: str | None
    plan: Plan | None
    as_found: AsFound | None
    progress: Progress
    limit: LimitMet | None
    ultimate_gain: Interval | None
    ultimate_period_s: Interval | None
    model: Model | None
    findings: tuple[Finding, ...]
    grade: Grade | None
    proposals: tuple[Proposal, ...]
    refused_rules: tuple[RefusedRule, ...]
    checklist: Checklist | None
    analysis: AnalysisReply | None
    problem: TaskProblem | None = None
    notice: str


class ExperimentPage(Wire):
    """One page of experiments, newest first."""

    items: tuple[Experiment, ...]
    next: str | None = None


class Samples(Wire):
    """The samples of an experiment, in columns; `number` counts from 0."""

    number: list[int]
    time_s: list[float]
    process_variable: list[float | None]
    controller_output: list[float | None]
    commanded_output: list[float | None]
    phase: list[str]


class StreamSample(Wire):
    """One event of the live stream; the event's id is `number`."""

    number: int
    time_s: Finite
    process_variable: Finite | None
    controller_output: Finite | None
    commanded_output: Finite | None
    phase: Phase


class Acknowledge(Wire):
    """A person has looked at the loop after an exit that could not be verified."""

    remark: Annotated[str, Field(min_length=3, max_length=500, pattern=r"^[^\x00]*$")]
