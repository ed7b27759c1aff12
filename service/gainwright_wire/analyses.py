"""Analyses on the wire: estimates, models, findings, proposals, the checklist and uploaded records."""

from __future__ import annotations

from enum import StrEnum
from typing import Annotated, Literal

from pydantic import Field

from gainwright_wire.base import Finite, Interval, LongText, NonNegative, Positive, ShortText, Wire
from gainwright_wire.loops import Controller


class Verdict(StrEnum):
    """The three verdicts of findings and checklist items."""

    PASS = "pass"
    CAUTION = "caution"
    FAIL = "fail"


class Grade(StrEnum):
    """How far a record can be trusted."""

    GOOD = "good"
    FAIR = "fair"
    UNUSABLE = "unusable"


class UltimatePoint(Wire):
    """One estimate of the ultimate point."""

    gain: Interval
    period_s: Interval


class ResponsePoint(Wire):
    """A measured point of the frequency response, PV units per output unit."""

    omega_rad_s: Positive
    real: Finite
    imaginary: Finite
    covariance: tuple[Finite, Finite, Finite]
    harmonic: int


class Model(Wire):
    """The fitted process model; `static_gain` is signed, and null where the process integrates."""

    structure: str
    static_gain: Finite | None
    integrating_gain: Finite | None
    time_constants_s: tuple[NonNegative, ...]
    dead_time_s: NonNegative
    zero_time_s: Finite
    natural_frequency_rad_s: Positive | None
    damping: Finite | None


class WeightedModel(Wire):
    """An adequate model and its weight among the adequate ones."""

    model: Model
    weight: NonNegative


class Finding(Wire):
    """One diagnosis: a number, its bounds, a verdict, one sentence."""

    name: str
    verdict: Verdict
    value: Finite
    caution_at: Finite | None
    fail_at: Finite | None
    unit: str
    sentence: str


class GainSetting(Wire):
    """One number to enter in the controller, with its name and unit there."""

    name: str
    value: Finite
    unit: str


class LoopMargins(Wire):
    """Margins of the loop with the fitted model; null where no bound exists."""

    gain_margin: Positive | None
    phase_margin_deg: Finite | None
    delay_margin_s: Finite | None
    peak_sensitivity: Positive
    peak_complementary_sensitivity: Positive


class Proposal(Wire):
    """Gains for one loop in its controller's form, with the margins they give on the fitted model."""

    rule: str
    controller_kind: Literal["P", "PI", "PID"]
    source: str
    settings: tuple[GainSetting, ...]
    action: Literal["direct", "reverse"]
    equation: str
    hand_check: str
    proportional_gain: Positive
    integral_time_s: Positive | None
    derivative_time_s: NonNegative
    derivative_filter_n: Positive
    margins: LoopMargins | None
    recommended: bool
    cautions: tuple[str, ...]


class RefusedRule(Wire):
    """A rule that does not apply here, and why."""

    rule: str
    controller_kind: Literal["P", "PI", "PID"]
    reason: str


class ItemAnswer(StrEnum):
    """How a checklist item came by its verdict."""

    MEASURED = "measured"
    ANSWERED = "answered"
    UNANSWERED = "unanswered"


class ChecklistItem(Wire):
    """One item: what it asks, what was measured, the limit, the verdict, who answers for it."""

    id: Annotated[str, Field(pattern=r"^[ABD][0-9]{1,2}$")]
    stage: Literal["before", "during", "after"]
    question: str
    starred: bool
    verdict: Verdict
    basis: ItemAnswer
    measured: Finite | None = None
    limit: Finite | None = None
    unit: str = ""
    detail: str = ""
    answered_by: str | None = None
    reason: str | None = None
    remedy: str = ""


class ChecklistCounts(Wire):
    """How many items passed, need a reason, or block."""

    passed: int
    caution: int
    failed: int


class Checklist(Wire):
    """All items of a loop's class, counted in three; never one tick."""

    loop_class: Literal["bench", "plant"]
    items: tuple[ChecklistItem, ...]
    counts: ChecklistCounts
    notice: str


class AnalysisReply(Wire):
    """What the analysis of one record says. Estimates are null when the grade is unusable."""

    ultimate_gain: Interval | None
    ultimate_period_s: Interval | None
    describing_function: UltimatePoint | None
    fourier: UltimatePoint | None
    model_crossover: UltimatePoint | None
    response_points: tuple[ResponsePoint, ...]
    model: Model | None
    models: tuple[WeightedModel, ...] = ()
    findings: tuple[Finding, ...]
    grade: Grade
    reasons: tuple[str, ...]
    swing: Finite
    relay_amplitude: Finite
    hysteresis: Finite
    noise: Finite
    scored_cycles: int
    confidence: Positive
    dominant_uncertainty: str
    remedy: str
    proposals: tuple[Proposal, ...] = ()
    refused_rules: tuple[RefusedRule, ...] = ()
    notice: str = ""


Column = Annotated[list[float], Field(max_length=2_000_000)]


class RecordUpload(Wire):
    """A test recorded elsewhere: three columns of equal length, and what is known of the test."""

    time_s: Column
    process_variable: Column
    controller_output: Column
    output_is: Literal["applied_after", "read_back_before"] = "applied_after"
    reference: Finite | None = None
    hysteresis: NonNegative | None = None
    latency_s: NonNegative = 0.0
    confidence: Annotated[float, Field(ge=0.5, le=0.999)] = 0.95
    controller: Controller | None = None
    tag: ShortText = ""
    notes: LongText = ""


class RecordReply(Wire):
    """An uploaded record and its analysis."""

    id: str
    at: str
    by: str
    tag: str
    samples: int
    analysis: AnalysisReply
