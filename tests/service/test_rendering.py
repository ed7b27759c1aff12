"""Every field of an analysis reaches the wire, by equal names."""

from __future__ import annotations

import dataclasses

import pytest

from gainwright import results
from gainwright.models import ProcessModel, Structure
from gainwright_service.rendering import PARTS, attribute_of, render
from gainwright_wire import analyses

POINT = results.UltimatePoint(results.Estimate(2.0, 1.9, 2.1), results.Estimate(10.0, 9.5, 10.5))
MODEL = ProcessModel(Structure.THIRD_ORDER_ZERO, 1.5, (5.0, 1.0, 0.5), 2.0, 0.25)
ANALYSIS = results.Analysis(
    ultimate_gain=results.Estimate(2.0, 1.9, 2.1),
    ultimate_period=results.Estimate(10.0, 9.5, 10.5),
    describing_function=POINT,
    fourier=POINT,
    model_crossover=POINT,
    response_points=(results.ResponsePoint(0.6, complex(-0.5, 0.01), (1e-6, 2e-7, 3e-6), 1),),
    model=MODEL,
    models=(results.WeightedModel(MODEL, 0.75),),
    findings=(results.Finding("chatter", results.Verdict.PASS, 0.01, 0.05, 0.1, "", "No chatter."),),
    grade=results.Grade.FAIR,
    reasons=("few cycles",),
    swing=0.5,
    relay_amplitude=4.0,
    hysteresis=0.1,
    noise=0.02,
    scored_cycles=3,
    confidence=0.9,
    dominant_uncertainty="noise",
    remedy="double the cycles",
)
PAIRS = [
    (results.Analysis, analyses.AnalysisReply),
    (results.Estimate, analyses.Interval),
    (results.UltimatePoint, analyses.UltimatePoint),
    (results.ResponsePoint, analyses.ResponsePoint),
    (results.WeightedModel, analyses.WeightedModel),
    (results.Finding, analyses.Finding),
    (ProcessModel, analyses.Model),
]
# Taken by the properties static_gain and integrating_gain.
SPLIT = {"response": set(PARTS), "gain": {"static_gain", "integrating_gain"}}


@pytest.mark.parametrize(("domain", "wire"), PAIRS, ids=lambda c: c.__name__)
def test_every_field_of_the_domain_has_its_field_on_the_wire(domain: type, wire: type[analyses.Wire]) -> None:
    class Names:
        """Every attribute of the domain result."""

    for field in dataclasses.fields(domain):
        setattr(Names, field.name, None)
    taken = {attribute_of(Names, name) for name in wire.model_fields}
    missing = {f.name for f in dataclasses.fields(domain)} - taken
    assert {m for m in missing if not SPLIT.get(m, {"?"}) <= set(wire.model_fields)} == set()


def test_the_values_of_an_analysis_arrive() -> None:
    reply = render(analyses.AnalysisReply, ANALYSIS)
    assert reply.ultimate_period_s == analyses.Interval(value=10.0, low=9.5, high=10.5)
    assert reply.fourier is not None
    assert reply.fourier.period_s.high == 10.5
    assert (reply.response_points[0].real, reply.response_points[0].imaginary) == (-0.5, 0.01)
    assert reply.response_points[0].covariance == (1e-6, 2e-7, 3e-6)
    assert reply.model is not None
    assert reply.model.static_gain == 1.5
    assert reply.model.integrating_gain is None
    assert reply.model.time_constants_s == (5.0, 1.0, 0.5)
    assert reply.model.dead_time_s == 2.0
    assert reply.models[0].weight == 0.75
    assert reply.findings[0].sentence == "No chatter."
    assert reply.grade is analyses.Grade.FAIR
    assert reply.reasons == ("few cycles",)
    assert (reply.swing, reply.relay_amplitude, reply.hysteresis, reply.noise) == (0.5, 4.0, 0.1, 0.02)
    assert (reply.scored_cycles, reply.confidence) == (3, 0.9)
    assert (reply.dominant_uncertainty, reply.remedy) == ("noise", "double the cycles")


def test_a_wire_field_without_a_source_is_an_error_that_names_it() -> None:
    with pytest.raises(AttributeError, match="Estimate has no gain for UltimatePoint"):
        render(analyses.UltimatePoint, results.Estimate(1.0, 1.0, 1.0))
