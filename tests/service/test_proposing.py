"""Proposals in the controller's own form, with margins; refusals with reasons; one recommendation at most.

Reference row: SIMC PI on exp(-2 s)/(10 s + 1) gives K 2.5, Ti 10 s, Ms 1.590, GM 3.14, PM 61.4 deg (Skogestad,
J. Process Control 13:291-309, 2003, Table 1; values from memory, recomputed).
"""

from __future__ import annotations

import dataclasses
import math

import pytest

from gainwright import results
from gainwright.margins import ultimate_point
from gainwright.models import ProcessModel, Structure
from gainwright_service.proposing import Target, propose
from gainwright_wire.analyses import Proposal
from gainwright_wire.loops import Controller

FIRST_ORDER = ProcessModel(Structure.FIRST_ORDER, 1.0, (10.0,), 2.0)
SECOND_ORDER = ProcessModel(Structure.SECOND_ORDER, 1.0, (10.0, 3.0), 2.0)
INTEGRATING = ProcessModel(Structure.INTEGRATING, 0.1, (), 2.0)
CONTROLLER = Controller(form="ideal", gain="engineering")


def _analysis(
    model: ProcessModel | None, grade: results.Grade = results.Grade.GOOD, noise: float = 0.0
) -> results.Analysis:
    gain, period = ultimate_point((model or FIRST_ORDER).transfer_function())
    usable = grade is not results.Grade.UNUSABLE
    return results.Analysis(
        ultimate_gain=results.Estimate(gain, gain, gain) if usable else None,
        ultimate_period=results.Estimate(period, period, period) if usable else None,
        describing_function=None,
        fourier=None,
        model_crossover=None,
        response_points=(),
        model=model,
        models=(),
        findings=(),
        grade=grade,
        reasons=(),
        swing=1.0,
        relay_amplitude=5.0,
        hysteresis=0.1,
        noise=noise,
        scored_cycles=4,
        confidence=0.95,
        dominant_uncertainty="",
        remedy="",
    )


def _find(analysis: results.Analysis, rule: str, kind: str, controller: Controller | None = CONTROLLER) -> Proposal:
    proposals, _ = propose(analysis, Target(controller, "raises", "degC", "%", 100.0))
    return next(p for p in proposals if (p.rule, p.controller_kind) == (rule, kind))


def test_simc_pi_gives_the_published_margins() -> None:
    found = _find(_analysis(FIRST_ORDER), "skogestad_2003", "PI")
    assert (found.proportional_gain, found.integral_time_s) == (pytest.approx(2.5), pytest.approx(10.0))
    assert found.margins is not None
    assert found.margins.peak_sensitivity == pytest.approx(1.590, abs=2e-3)
    assert found.margins.gain_margin == pytest.approx(3.14, abs=5e-3)
    assert found.margins.phase_margin_deg == pytest.approx(61.4, abs=0.1)


def test_the_settings_are_in_the_controllers_own_units() -> None:
    controller = Controller(
        form="parallel",
        gain="percent_per_percent",
        integral_unit="min",
        input_low=0,
        input_high=50,
        output_low=0,
        output_high=100,
    )
    found = _find(_analysis(FIRST_ORDER), "skogestad_2003", "PI", controller)
    # K 2.5 %/degC on 50 degC over 100 % is 1.25 %/%; per minute over 10 s that is 7.5.
    assert [(s.name, s.value) for s in found.settings] == [("Kp", pytest.approx(1.25)), ("Ki", pytest.approx(7.5))]
    assert "every 10 s" in found.hand_check


@pytest.mark.parametrize(
    "controller", [None, Controller(form="ideal", gain="percent_per_percent")], ids=["undeclared", "no ranges"]
)
def test_no_settings_are_printed_where_form_or_ranges_are_undeclared(controller: Controller | None) -> None:
    found = _find(_analysis(FIRST_ORDER), "skogestad_2003", "PI", controller)
    assert found.settings == ()
    assert any("Not settings to enter" in c for c in found.cautions)
    assert found.proportional_gain == pytest.approx(2.5)


def test_the_action_follows_the_declared_effect_else_the_measured_sign() -> None:
    falling = dataclasses.replace(FIRST_ORDER, gain=-1.0)
    declared, _ = propose(_analysis(FIRST_ORDER), Target(CONTROLLER, "lowers"))
    measured, _ = propose(_analysis(falling), Target(CONTROLLER, None))
    assert {p.action for p in declared} == {"direct"}
    assert {p.action for p in measured} == {"direct"}
    assert _find(_analysis(FIRST_ORDER), "skogestad_2003", "PI").action == "reverse"


def test_small_margins_are_cautioned_against() -> None:
    found = _find(_analysis(FIRST_ORDER), "ziegler_nichols_1942", "PI")
    assert found.margins is not None
    assert found.margins.peak_sensitivity > 2.0
    assert any("Peak sensitivity" in c for c in found.cautions)


def test_an_unusable_record_gives_no_gains_and_says_so_for_every_rule() -> None:
    proposals, refused = propose(_analysis(None, results.Grade.UNUSABLE), Target(CONTROLLER, "raises"))
    assert proposals == ()
    assert len(refused) == 7
    assert all("unusable" in r.reason for r in refused)


def test_a_rule_outside_its_range_is_refused_with_the_reason() -> None:
    _, refused = propose(_analysis(FIRST_ORDER), Target(CONTROLLER, "raises"))
    assert [(r.rule, r.controller_kind) for r in refused] == [("skogestad_2003", "PID")]
    assert "second" in refused[0].reason


def _recommended(analysis: results.Analysis) -> tuple[str, str]:
    proposals, _ = propose(analysis, Target(CONTROLLER, "raises", output_span=100.0))
    chosen = [p for p in proposals if p.recommended]
    assert len(chosen) == 1
    return chosen[0].rule, chosen[0].controller_kind


def test_one_proposal_is_recommended_and_it_fits_process_and_grade() -> None:
    assert _recommended(_analysis(FIRST_ORDER)) == ("skogestad_2003", "PI")
    assert _recommended(_analysis(SECOND_ORDER)) == ("skogestad_2003", "PID")
    assert _recommended(_analysis(SECOND_ORDER, results.Grade.FAIR)) == ("skogestad_2003", "PI")
    assert _recommended(_analysis(INTEGRATING)) == ("tyreus_luyben_1992", "PI")


def test_noise_speaks_against_a_derivative() -> None:
    assert _recommended(_analysis(SECOND_ORDER, noise=0.2)) == ("skogestad_2003", "PI")


def test_without_a_model_the_ultimate_point_serves_and_the_margins_are_unknown() -> None:
    assert _recommended(_analysis(None)) == ("tyreus_luyben_1992", "PI")
    found = _find(_analysis(None), "tyreus_luyben_1992", "PI")
    assert found.margins is None
    assert any("unknown" in c for c in found.cautions)


def test_the_controllers_own_scan_costs_margin() -> None:
    slow = Controller(form="ideal", gain="engineering", sample_interval_s=2.0)
    fast = _find(_analysis(FIRST_ORDER), "skogestad_2003", "PI")
    late = _find(_analysis(FIRST_ORDER), "skogestad_2003", "PI", slow)
    assert fast.margins is not None
    assert late.margins is not None
    assert late.margins.phase_margin_deg is not None
    assert fast.margins.phase_margin_deg is not None
    # One second at the gain crossover of 0.25 rad/s.
    assert fast.margins.phase_margin_deg - late.margins.phase_margin_deg == pytest.approx(math.degrees(0.25), rel=0.02)
