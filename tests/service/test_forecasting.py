"""The forecast: numbers from what is known, plain words, and nothing moved."""

from __future__ import annotations

import pytest

from gainwright_service.errors import PlanRefused, RequestError
from gainwright_service.forecasting import forecast, watchdog_in_words
from gainwright_wire.tasks import ForecastRequest
from service_loops import a_loop

GUESS = {"static_gain": 0.5, "time_constant_s": 10.0, "dead_time_s": 2.0, "noise": 0.02}


def _request(**changes: float | None) -> ForecastRequest:
    return ForecastRequest.model_validate({**GUESS, **changes})


def test_without_any_knowledge_the_limits_speak() -> None:
    said = forecast(a_loop(), ForecastRequest())
    assert said.basis == "limits"
    assert said.worst_deviation == pytest.approx(3.6)
    assert said.time_to_finish_s == 600.0
    assert "Nothing is known" in said.cautions[0]


def test_a_guess_gives_swing_period_time_switches_and_cost() -> None:
    said = forecast(a_loop(), _request())
    assert said.basis == "guess"
    assert said.worst_swing is not None
    assert said.worst_swing < said.worst_deviation < 3.0
    assert said.integrated_deviation is not None
    assert said.time_to_finish_s < 600.0
    assert said.switches <= 40
    assert said.output_travel == pytest.approx(2 * 5.0 * said.switches)


def test_a_swing_beyond_the_allowed_deviation_is_said() -> None:
    said = forecast(a_loop(), _request(static_gain=8.0))
    assert any("ended by its limit" in c for c in said.cautions)


def test_noise_that_asks_for_too_much_amplitude_is_said() -> None:
    said = forecast(a_loop(), _request(noise=0.4))
    assert any("The noise asks for" in c for c in said.cautions)


def test_a_guess_against_the_declared_effect_is_refused() -> None:
    with pytest.raises(RequestError) as caught:
        forecast(a_loop(), _request(static_gain=-0.5))
    assert caught.value.errors[0].field == "static_gain"


def test_an_incomplete_guess_names_what_is_missing() -> None:
    with pytest.raises(RequestError) as caught:
        forecast(a_loop(), ForecastRequest(static_gain=0.5))
    assert {e.field for e in caught.value.errors} == {"time_constant_s", "dead_time_s"}


def test_a_reference_outside_the_limits_is_refused() -> None:
    with pytest.raises(PlanRefused):
        forecast(a_loop(), ForecastRequest(reference=200.0))


def test_hold_last_is_said_to_leave_the_output_driven() -> None:
    hold = {"address": 20, "watchdog": "hold_last", "timeout_s": 3}
    assert "leaves the output driven" in watchdog_in_words(a_loop(adapter__heartbeat=hold))
    assert "leaves the output driven" in watchdog_in_words(a_loop(adapter__heartbeat=None))
    assert "moves the output to the resting output" in watchdog_in_words(a_loop())


def test_the_words_defer_and_claim_nothing() -> None:
    said = forecast(a_loop(), _request())
    assert "not an emergency stop" in said.how_to_stop
    assert "no risk reduction" in said.notice
    assert "never put into automatic" in said.exit_action
