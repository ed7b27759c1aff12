"""What a person is asked before a test: five questions on `bench`; on `plant` every item that nobody answered."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from gainwright_client.display.numbers import figure, with_unit
from gainwright_wire.analyses import Checklist, ItemAnswer
from gainwright_wire.loops import Loop
from gainwright_wire.tasks import BENCH_SENTENCE, Answer, Forecast

if TYPE_CHECKING:
    from rich.console import Console


class Declined(Exception):
    """A question was answered in a way that bars the test."""


@dataclass(frozen=True, slots=True)
class Question:
    """One question, answered yes for going on."""

    text: str
    barred: str


def bench_questions(loop: Loop, forecast: Forecast) -> tuple[Question, ...]:
    """The five questions of a bench start, with the loop's own numbers in them."""
    plan, pv, out = forecast.plan, loop.process_variable.unit, loop.controller_output.unit
    hard = f"{figure(plan.process_variable_low)} … {with_unit(plan.process_variable_high, pv, 4)}"
    band = f"{figure(plan.output_low)} … {with_unit(plan.output_high, out, 4)}"
    return (
        Question(
            f"{loop.tag} is not part of a safety function, nor shares a transmitter or final element with one?",
            "a loop that is part of a safety function is never tested",
        ),
        Question(f"The process variable may go anywhere in {hard}?", "correct the loop's limits first"),
        Question(f"The output may go anywhere in {band}?", "correct the loop's output band first"),
        Question(f"The right thing at the end: {forecast.exit_action}", "declare another exit_action first"),
        Question("You are at the loop for the whole test, with a stop in reach?", "be there, with a stop in reach"),
    )


def ask_bench(loop: Loop, forecast: Forecast) -> None:
    """Ask the five questions and have the sentence signed. Raises `Declined` at the first no."""
    import typer

    for number, question in enumerate(bench_questions(loop, forecast), 1):
        if not typer.confirm(f"{number}/5  {question.text}"):
            raise Declined(question.barred)
    if not typer.confirm(f"Sign: “{BENCH_SENTENCE}”"):
        raise Declined("the sentence is not signed: register the loop as class 'plant' and use its whole checklist")


def ask_plant(checklist: Checklist, answered: dict[str, Answer], console: Console) -> dict[str, Answer]:
    """Ask for every before-item that has no answer yet; what was answered already stays."""
    import typer

    answers = dict(answered)
    for item in checklist.items:
        if item.stage != "before" or item.id in answers or item.basis is ItemAnswer.MEASURED:
            continue
        console.print(f"[bold]{item.id}{'*' if item.starred else ''}[/bold]  {item.question}")
        verdict = ""
        while verdict not in ("pass", "caution", "fail"):
            verdict = typer.prompt("pass, caution or fail").strip().lower()
        reason = typer.prompt("reason") if verdict == "caution" else ""
        answers[item.id] = Answer.model_validate({"verdict": verdict, "reason": reason})
    return answers


def read_answers(document: dict[str, Any]) -> dict[str, Answer]:
    """Answers from a JSON object: item to verdict and reason. Raises pydantic's `ValidationError`."""
    return {item: Answer.model_validate(answer) for item, answer in document.items()}
