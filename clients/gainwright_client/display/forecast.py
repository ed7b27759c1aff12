"""The forecast as people read it before anything moves."""

from __future__ import annotations

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from gainwright_client.display.numbers import duration, figure, with_unit
from gainwright_wire.loops import Loop
from gainwright_wire.tasks import Forecast

BASIS = {
    "limits": "the worst that the limits allow; nothing is known of the process yet",
    "listening": "from listening to the loop",
    "history": "from the loop's last test",
    "guess": "from the stated guess",
}


def forecast_view(forecast: Forecast, loop: Loop) -> RenderableType:
    """What the test will do at worst, how it ends, how it is stopped."""
    plan, pv, out = forecast.plan, loop.process_variable.unit, loop.controller_output.unit
    allowed = min(plan.deviation_up, plan.deviation_down)
    deviation = f"{with_unit(forecast.worst_deviation, pv)} from the reference; ends beyond {with_unit(allowed, pv)}"
    limits = f"{figure(plan.process_variable_low)} … {figure(plan.process_variable_high)} {pv}"
    amplitude = f"grows from {figure(plan.start_amplitude, 3)} to at most {with_unit(plan.max_amplitude, out)}"
    band = f"band {figure(plan.output_low)} … {with_unit(plan.output_high, out)}"
    change = f"at most {with_unit(plan.max_output_change, out)} from the resting output"
    time = f"at most {duration(forecast.time_to_finish_s)}, {forecast.switches} switches"
    expected = []
    if forecast.period_s is not None and forecast.worst_swing is not None:
        expected = [
            ("expected", f"period {with_unit(forecast.period_s, 's')}, swing {with_unit(forecast.worst_swing, pv)}")
        ]
    rows = [
        ("basis", BASIS[forecast.basis]),
        ("worst deviation", f"{deviation}; hard limits {limits}"),
        ("amplitude", f"{amplitude}; {change}; {band}"),
        ("time", time),
        *expected,
        ("at the end", forecast.exit_action),
        ("watchdog", forecast.watchdog),
        ("to stop", "Ctrl-C here, or take over at the device: the test yields. This is not an emergency stop."),
    ]
    grid = Table.grid(padding=(0, 2))
    grid.add_column(style="dim", justify="right", no_wrap=True)
    grid.add_column()
    for name, text in rows:
        grid.add_row(name, text)
    cautions = [Text(f"! {caution}", style="yellow") for caution in forecast.cautions]
    return Group(grid, *cautions)
