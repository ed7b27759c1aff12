"""Numbers, plots and views of the command."""

from __future__ import annotations

import math
from io import StringIO

import pytest
from rich.console import Console

from gainwright_client.display.checklist import checklist_view, counts
from gainwright_client.display.forecast import forecast_view
from gainwright_client.display.live import LiveView
from gainwright_client.display.numbers import duration, figure, half_width_percent, interval
from gainwright_client.display.plot import gauge, trace
from gainwright_service.forecasting import forecast
from gainwright_wire.base import Interval
from gainwright_wire.tasks import ForecastRequest, Phase, StreamProgress, StreamSample
from service_loops import a_loop


@pytest.mark.parametrize(
    ("value", "text"),
    [(None, "–"), (0.0, "0"), (9.6578, "9.658"), (1500.0, "1500"), (0.0123456, "0.01235"), (-2.5, "-2.5")],
)
def test_a_figure_has_four_digits_and_no_exponent(value: float | None, text: str) -> None:
    assert figure(value) == text


def test_very_large_and_small_figures_get_an_exponent() -> None:
    assert figure(1.234e9) == "1.234e+09"
    assert figure(1.5e-7) == "1.500e-07"


@pytest.mark.parametrize(
    ("low", "value", "high", "text"),
    [
        (9.57, 9.63, 9.69, "9.63  [9.57 … 9.69]"),
        (8.8, 9.6, 10.4, "9.6  [8.8 … 10.4]"),
        (1180.0, 1200.0, 1220.0, "1200  [1180 … 1220]"),
        (5.0, 5.0, 5.0, "5.0  [5.0 … 5.0]"),
    ],
)
def test_an_interval_has_the_digits_that_its_width_supports(low: float, value: float, high: float, text: str) -> None:
    assert interval(Interval(value=value, low=low, high=high)) == text


def test_half_width_and_durations_are_said_plainly() -> None:
    assert half_width_percent(Interval(value=10, low=9.5, high=10.5)) == pytest.approx(5.0)
    assert [duration(s) for s in (12.34, 600, 7200)] == ["12.3 s", "10 min", "2 h"]


def test_a_trace_puts_high_values_on_top_and_joins_steps() -> None:
    lines = trace([0, 1, 2, 3], [0, 0, 1, 1], span=(0, 3), low=0, high=1, width=2, height=1)
    assert lines == ["⣀⡏"]
    top, bottom = trace([0, 10], [1, 1], span=(0, 10), low=0, high=1, width=4, height=2)
    assert any(c != "⠀" for c in top)
    assert set(bottom) == {"⠀"}


def test_a_trace_without_values_is_blank() -> None:
    assert trace([0, 1], [math.nan, math.nan], span=(0, 1), low=0, high=1, width=3, height=1) == ["⠀" * 3]


def test_a_gauge_is_full_at_one_and_stays_in_its_width() -> None:
    assert gauge(0, 4) == "····"
    assert gauge(0.5, 4) == "██··"
    assert gauge(7.0, 4) == "████"


def _text(*views: object, terminal: bool = False) -> str:
    console = Console(file=StringIO(), width=100, force_terminal=terminal, highlight=False)
    for view in views:
        console.print(view)
    assert isinstance(console.file, StringIO)
    return console.file.getvalue()


def test_the_forecast_shows_limits_exit_watchdog_and_that_the_stop_is_no_emergency_stop() -> None:
    loop = a_loop()
    text = " ".join(_text(forecast_view(forecast(loop, ForecastRequest()), loop)).split())
    for word in ("20 … 95 degC", "at most 10 %", "Writes the resting output", "for 3 s", "not an emergency stop"):
        assert word in text


def test_the_checklist_shows_three_counts_and_every_item_that_is_not_a_pass() -> None:
    sheet = forecast(a_loop(), ForecastRequest()).checklist
    text = _text(counts(sheet), checklist_view(sheet))
    assert f"{sheet.counts.passed} pass · {sheet.counts.caution} caution · {sheet.counts.failed} fail" in text
    assert all(item.id in text for item in sheet.items)


SAMPLE = StreamSample(
    number=0, time_s=1.0, process_variable=60, controller_output=45, commanded_output=None, phase=Phase.LISTENING
)
PROGRESS = StreamProgress(
    phase=Phase.SWINGING, swing=0.8, period_s=4, provisional_ultimate_gain=8, worst_deviation=1.5, reference=60
)


def _view(console: Console) -> LiveView:
    ticks = iter(range(1000))
    return LiveView(console, a_loop(), 3.0, lambda: next(ticks))


def test_without_a_terminal_the_live_view_prints_a_line_at_each_phase() -> None:
    console = Console(file=StringIO(), width=100)
    with _view(console) as view:
        for _ in range(3):
            view.take(SAMPLE)
        view.take(PROGRESS)
    assert isinstance(console.file, StringIO)
    lines = console.file.getvalue().splitlines()
    assert len(lines) == 2
    assert "listening" in lines[0]
    assert "swinging" in lines[1]
    assert "gain so far 8 %/degC" in lines[1]
    assert "deviation 1.5 of 3" in lines[1]


def test_on_a_terminal_the_live_view_draws_both_signals_and_ends_with_one_frame() -> None:
    console = Console(file=StringIO(), width=100, force_terminal=True, color_system=None)
    with _view(console) as view:
        view.take(SAMPLE)
        view.take(
            SAMPLE.model_copy(update={"number": 1, "time_s": 2.0, "process_variable": 61, "commanded_output": 50})
        )
        view.take(PROGRESS)
        view.note("Stop asked for")
    assert isinstance(console.file, StringIO)
    text = console.file.getvalue()
    for word in ("TIC-201", "process variable", "controller output", "1.5 of 3 degC allowed", "Stop asked for"):
        assert word in text
