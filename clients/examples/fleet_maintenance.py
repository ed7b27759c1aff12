"""A maintenance round over many loops: tunes what needs it, says what became of each, and is safe to run again.

    python fleet_maintenance.py ROUND.csv --attended --report round.json

ROUND.csv has a header line with `tag`; more columns are allowed. The loops are registered with the service already
(`gainwright loop add`). A loop that was tuned today is skipped, one that is being tested is followed, one whose
interaction group is taken waits for its turn. Ctrl-C asks for a stop of every test and waits for the exits.

Exit status: 0 every loop is tuned; 1 some are not, the report says why; 2 the command line or the list is wrong;
3 the service cannot be reached; 130 stopped by Ctrl-C.
"""

from __future__ import annotations

import argparse
import asyncio
import csv
import json
import signal
import sys
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path

from gainwright_client import AsyncClient
from gainwright_client.errors import Busy, NotActive, Problem, ServiceUnreachable
from gainwright_wire.problems import ProblemCode
from gainwright_wire.tasks import Exit, Experiment, Outcome, StartExperiment, TaskState

TRUSTED = ("good", "fair")


@dataclass(frozen=True)
class Line:
    """One loop's line of the report."""

    tag: str
    result: str
    experiment: str = ""
    ultimate_gain: float | None = None
    ultimate_period_s: float | None = None
    rule: str = ""
    settings: str = ""
    detail: str = ""

    @property
    def tuned(self) -> bool:
        """Whether the loop has gains that can be trusted."""
        return self.result in ("tuned", "tuned today")


class Round:
    """The round's loops, the tests that run, and the wish to stop."""

    def __init__(self, client: AsyncClient, start: StartExperiment, at_once: int) -> None:
        self.client = client
        self.start = start
        self.places = asyncio.Semaphore(at_once)
        self.running: set[str] = set()
        self.ended = 0
        self.news = asyncio.Condition()
        self.stopping = False

    async def tune(self, tag: str) -> Line:
        """Bring one loop to its line of the report."""
        async with self.places:
            if self.stopping:
                return Line(tag, "not started", detail="the round was stopped")
            try:
                done = await self.tuned_today(tag)
                if done is not None:
                    return line(tag, "tuned today", done)
                return line(tag, "", await self.follow(await self.begin(tag)))
            except Problem as problem:
                return Line(tag, "refused", detail=str(problem))

    async def tuned_today(self, tag: str) -> Experiment | None:
        """The newest trusted test of today (UTC)."""
        today = datetime.now(UTC).date().isoformat()
        for found in (await self.client.experiment_page(tag, TaskState.FINISHED)).items:
            trusted = found.outcome is Outcome.COMPLETED and found.grade in TRUSTED
            if trusted and (found.finished_at or "").startswith(today):
                return found
        return None

    async def begin(self, tag: str) -> str:
        """The test to follow: the one that runs already, else a new one as soon as its group is free."""
        for state in (TaskState.RUNNING, TaskState.QUEUED):
            active = (await self.client.experiment_page(tag, state)).items
            if active:
                return active[0].id
        while True:
            seen = self.ended
            try:
                return (await self.client.start_experiment(tag, self.start)).id
            except Busy as busy:
                ours = self.running or self.ended > seen
                if busy.code is not ProblemCode.GROUP_BUSY or not ours or self.stopping:
                    raise
            async with self.news:
                while self.ended == seen and not self.stopping:
                    await self.news.wait()

    async def follow(self, id: str) -> Experiment:
        """Follow a test to its end."""
        self.running.add(id)
        try:
            async for told in self.client.follow(id):
                if isinstance(told, Experiment):
                    return told
            raise AssertionError("a followed test ends with its experiment")
        finally:
            self.running.discard(id)
            async with self.news:
                self.ended += 1
                self.news.notify_all()

    async def stop(self) -> None:
        """Ask for a stop of everything that runs."""
        self.stopping = True
        async with self.news:
            self.news.notify_all()
        for id in list(self.running):
            try:
                await self.client.stop_experiment(id)
            except NotActive:
                continue


def line(tag: str, result: str, found: Experiment) -> Line:
    """A finished test as a line of the report."""
    if not result:
        trusted = found.grade in TRUSTED and found.outcome is Outcome.COMPLETED and found.exit is Exit.VERIFIED
        result = "tuned" if trusted else "not tuned"
    chosen = next((p for p in found.proposals if p.recommended), None)
    grade = f", grade {found.grade.value}" if found.grade else ""
    reasons = found.limit.sentence if found.limit else "; ".join(found.analysis.reasons) if found.analysis else ""
    return Line(
        tag=tag,
        result=result,
        experiment=found.id,
        ultimate_gain=found.ultimate_gain.value if found.ultimate_gain else None,
        ultimate_period_s=found.ultimate_period_s.value if found.ultimate_period_s else None,
        rule=f"{chosen.rule} {chosen.controller_kind}" if chosen else "",
        settings=", ".join(f"{s.name} {s.value:.4g} {s.unit}" for s in chosen.settings) if chosen else "",
        detail=f"{found.outcome}, exit {found.exit}{grade}{': ' + reasons if reasons else ''}",
    )


async def run(tags: Sequence[str], start: StartExperiment, at_once: int) -> tuple[list[Line], bool]:
    """Run the round: the report's lines, and whether it was stopped."""
    async with AsyncClient() as client:
        await client.me()
        this = Round(client, start, at_once)
        stops: list[asyncio.Task[None]] = []
        event_loop = asyncio.get_running_loop()
        for number in (signal.SIGINT, signal.SIGTERM):
            event_loop.add_signal_handler(number, lambda: stops.append(asyncio.create_task(this.stop())))
        lines = await asyncio.gather(*(this.tune(tag) for tag in tags))
        await asyncio.gather(*stops)
    return lines, this.stopping


def summarise(lines: Sequence[Line], report: Path | None) -> bool:
    """Print one summary and write the report; whether every loop is tuned."""
    for one in lines:
        print(f"{one.tag:<12} {one.result:<12} {one.rule:<22} {one.settings:<40} {one.detail}")
    tuned = sum(one.tuned for one in lines)
    print(f"{tuned} of {len(lines)} loops are tuned.")
    if report is not None:
        report.write_text(json.dumps([asdict(one) for one in lines], indent=2) + "\n", encoding="utf-8")
    return tuned == len(lines)


def read_tags(path: Path) -> list[str]:
    """The tags of the round, each once, in the list's order."""
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            rows = list(csv.DictReader(file))
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        sys.stderr.write(f"{path}: {error}\n")
        raise SystemExit(2) from error
    tags = list(dict.fromkeys((row.get("tag") or "").strip() for row in rows))
    if not tags or "" in tags:
        sys.stderr.write(f"{path}: every line needs a tag under the header `tag`\n")
        raise SystemExit(2)
    return tags


def main() -> int:
    """The script; its exit status."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("round", type=Path, help="CSV list with a column `tag`")
    parser.add_argument("--attended", action="store_true", help="somebody is at the loops, with a stop in reach")
    parser.add_argument("--sign-bench-sentence", action="store_true", help="for loops of class bench")
    parser.add_argument("--at-once", type=int, default=3, help="tests at the same time at most")
    parser.add_argument("--report", type=Path, help="JSON file for the report")
    options = parser.parse_args()
    start = StartExperiment(
        attended=options.attended,
        bench_sentence_signed=options.sign_bench_sentence,
        comment=f"maintenance round {options.round.name}",
    )
    try:
        lines, stopped = asyncio.run(run(read_tags(options.round), start, max(1, options.at_once)))
    except ServiceUnreachable as error:
        sys.stderr.write(f"{error}\n")
        return 3
    tuned = summarise(lines, options.report)
    return 130 if stopped else 0 if tuned else 1


if __name__ == "__main__":
    sys.exit(main())
