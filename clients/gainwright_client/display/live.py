"""The live view of an experiment: what is known so far, and both signals drawn. Plain lines where no terminal is."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable
from types import TracebackType
from typing import Self

from rich.console import Console, Group, RenderableType
from rich.live import Live
from rich.panel import Panel
from rich.table import Table
from rich.text import Text

from gainwright_client.display.numbers import figure, with_unit
from gainwright_client.display.plot import gauge, trace
from gainwright_wire.loops import Loop
from gainwright_wire.tasks import Phase, StreamProgress, StreamSample

REFRESH_S = 0.12
LINE_EVERY_S = 5.0
KEPT = 20_000
WINDOW_PERIODS = 8.0
VALUE_HEIGHT, OUTPUT_HEIGHT = 7, 2
WORDS = {
    Phase.LISTENING: "listening: nothing is moved",
    Phase.PROBING: "probing: which way, and how far",
    Phase.SWINGING: "swinging: the relay drives the output",
    Phase.RETURNING: "returning: the output is handed back",
    Phase.FINISHED: "finished",
}


class LiveView:
    """Shows an experiment while it runs.

    Parameters
    ----------
    console : Console
    loop : Loop
    deviation : float, PV units
        The allowed deviation that the worst one is shown against.
    now : callable
        Monotonic seconds, to spare the terminal.
    """

    def __init__(self, console: Console, loop: Loop, deviation: float, now: Callable[[], float]) -> None:
        self._console = console
        self._loop = loop
        self._deviation = deviation
        self._now = now
        self._samples: deque[StreamSample] = deque(maxlen=KEPT)
        self._progress = StreamProgress()
        self._note = ""
        self._shown_at = -math.inf
        self._line: tuple[Phase | None, float, int] = (None, -math.inf, 0)
        self._live = Live(console=console, auto_refresh=False, transient=True) if console.is_terminal else None

    def __enter__(self) -> Self:
        if self._live is not None:
            self._live.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, traceback: TracebackType | None
    ) -> None:
        if self._live is not None:
            self._live.stop()
            if self._samples:
                self._console.print(self.frame())

    def note(self, text: str) -> None:
        """Say something beside the numbers."""
        self._note = text
        if self._live is None:
            self._console.print(text)
        else:
            self._show()

    def take(self, told: StreamSample | StreamProgress) -> None:
        """Take what the stream tells."""
        if isinstance(told, StreamSample):
            self._samples.append(told)
        else:
            self._progress = told
        if self._live is None:
            self._say()
        elif self._now() - self._shown_at >= REFRESH_S:
            self._show()

    def frame(self) -> RenderableType:
        """The view as it stands."""
        phase = self._phase()
        title = Text.assemble((f" {self._loop.tag} ", "bold"), (f"{WORDS[phase]} ", "cyan"))
        elapsed = self._samples[-1].time_s if self._samples else 0.0
        body = Group(*self._plots(), self._numbers())
        return Panel(
            body,
            title=title,
            title_align="left",
            subtitle=Text(f" {elapsed:.1f} s, {len(self._samples)} samples ", style="dim"),
            subtitle_align="right",
            border_style="cyan" if phase is not Phase.FINISHED else "dim",
            width=min(100, self._console.width),
            padding=(0, 1),
        )

    def _show(self) -> None:
        self._shown_at = self._now()
        if self._live is not None:
            self._live.update(self.frame(), refresh=True)

    def _phase(self) -> Phase:
        """The furthest phase told: samples and progress come by different ways."""
        told = [self._progress.phase, self._samples[-1].phase if self._samples else None]
        order = list(Phase)
        return max((phase for phase in told if phase is not None), key=order.index, default=Phase.LISTENING)

    def _plots(self) -> list[RenderableType]:
        width = min(100, self._console.width) - 4 - 22
        start, end = self._window()
        shown = [s for s in self._samples if s.time_s >= start]
        times = [s.time_s for s in shown]
        values = [math.nan if s.process_variable is None else s.process_variable for s in shown]
        outputs = [_output(s) for s in shown]
        reference = self._progress.reference
        table = Table.grid(padding=(0, 1))
        table.add_column(justify="right", width=20)
        table.add_column(width=width)
        rows = (
            (values, VALUE_HEIGHT, "cyan", self._loop.process_variable.unit, "process variable", reference),
            (outputs, OUTPUT_HEIGHT, "yellow", self._loop.controller_output.unit, "controller output", None),
        )
        for signal, height, colour, unit, name, mark in rows:
            low, high = _bounds(signal, mark)
            marks = () if mark is None else (mark,)
            lines = trace(times, signal, span=(start, end), low=low, high=high, width=width, height=height, marks=marks)
            table.add_row(_axis(name, low, high, unit, height), Text("\n".join(lines), style=colour))
        return [table]

    def _window(self) -> tuple[float, float]:
        end = self._samples[-1].time_s if self._samples else 0.0
        period = self._progress.period_s
        start = end - WINDOW_PERIODS * period if period else 0.0
        return max(0.0, min(start, end - 20.0)), max(end, 1.0)

    def _numbers(self) -> RenderableType:
        progress, unit = self._progress, self._loop.process_variable.unit
        worst = progress.worst_deviation or 0.0
        share = worst / self._deviation
        colour = "green" if share < 0.8 else "yellow" if share < 1.0 else "red"
        grid = Table.grid(padding=(0, 3))
        grid.add_row(
            _field("swing", with_unit(progress.swing, unit)),
            _field("period", with_unit(progress.period_s, "s")),
            _field("ultimate gain so far", with_unit(progress.provisional_ultimate_gain, self._gain_unit())),
            _field("cycles", f"{progress.cycles}, scored {progress.scored_cycles}"),
        )
        deviation = Text.assemble(
            ("worst deviation ", "dim"),
            f"{figure(worst, 3)} of {figure(self._deviation, 3)} {unit} allowed  ",
            (gauge(share, 20), colour),
        )
        note = self._note or progress.message
        return Group(grid, deviation, *([Text(note, style="bold yellow" if self._note else "dim")] if note else []))

    def _gain_unit(self) -> str:
        return f"{self._loop.controller_output.unit}/{self._loop.process_variable.unit}"

    def _say(self) -> None:
        """A plain line at each phase, each scored cycle and each few seconds."""
        progress, phase = self._progress, self._phase()
        said_phase, said_at, said_cycles = self._line
        due = self._now() - said_at >= LINE_EVERY_S
        if phase is said_phase and progress.scored_cycles == said_cycles and not due:
            return
        self._line = (phase, self._now(), progress.scored_cycles)
        unit = self._loop.process_variable.unit
        elapsed = self._samples[-1].time_s if self._samples else 0.0
        parts = [f"{elapsed:7.1f} s  {phase.value:<10}"]
        if progress.swing:
            parts.append(f"swing {with_unit(progress.swing, unit)}")
        if progress.period_s:
            parts.append(f"period {with_unit(progress.period_s, 's')}")
        if progress.provisional_ultimate_gain:
            parts.append(f"gain so far {with_unit(progress.provisional_ultimate_gain, self._gain_unit())}")
        if progress.worst_deviation:
            parts.append(f"deviation {figure(progress.worst_deviation, 3)} of {figure(self._deviation, 3)}")
        self._console.print("  ".join(parts), highlight=False)


class Silent:
    """Shows nothing, for scripts."""

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *raised: object) -> None:
        return

    def take(self, told: StreamSample | StreamProgress) -> None:
        """Take what the stream tells."""

    def note(self, text: str) -> None:
        """Nobody is there to be told."""


def _output(sample: StreamSample) -> float:
    for value in (sample.commanded_output, sample.controller_output):
        if value is not None:
            return value
    return math.nan


def _bounds(values: list[float], mark: float | None) -> tuple[float, float]:
    known = [v for v in values if math.isfinite(v)] + ([mark] if mark is not None else [])
    if not known:
        return 0.0, 1.0
    low, high = min(known), max(known)
    room = 0.08 * (high - low) or max(1e-3, 1e-3 * abs(high))
    return low - room, high + room


def _axis(name: str, low: float, high: float, unit: str, height: int) -> Text:
    digits = 2 + max(0, math.ceil(math.log10(max(abs(high), abs(low), 1e-9) / (high - low) + 1)))
    middle = [Text(name, style="dim")] + [Text("")] * (height - 3) if height > 2 else []
    if height <= 2:
        return Text.assemble((f"{name} ", "dim"), f"{figure(high, digits)} {unit}\n{figure(low, digits)} {unit}")
    return Text("\n").join([Text(f"{figure(high, digits)} {unit}"), *middle, Text(f"{figure(low, digits)} {unit}")])


def _field(name: str, value: str) -> Text:
    return Text.assemble((f"{name} ", "dim"), (value, "bold"))
