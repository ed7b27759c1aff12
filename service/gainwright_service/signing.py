"""Sign-offs on an experiment's checklist: who answered what, and the sheet with everything known so far."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.checklist import ITEMS, SignedAnswer, Start, assemble, measure_before, with_answers
from gainwright_service.errors import RequestError
from gainwright_service.planning import plan_with_defaults
from gainwright_service.replies import answers_of, experiment
from gainwright_service.store import sign_offs, tasks
from gainwright_wire.analyses import Checklist, Verdict
from gainwright_wire.loops import Loop
from gainwright_wire.problems import FieldProblem
from gainwright_wire.tasks import Answer, Experiment, StartExperiment

_IDS = {item.id for item in ITEMS}


async def signed_experiment(connection: AsyncConnection, task_id: str) -> Experiment:
    """One experiment with its sign-offs. Raises `NotFound`."""
    row = await tasks.get(connection, task_id)
    signed = await signed_on(connection, [task_id])
    return experiment(row, signed.get(task_id))


async def signed_on(connection: AsyncConnection, task_ids: Sequence[str]) -> dict[str, dict[str, SignedAnswer]]:
    """The sign-offs of some experiments, by experiment and item."""
    found: dict[str, dict[str, SignedAnswer]] = {}
    for row in await sign_offs.of_tasks(connection, task_ids):
        answer = SignedAnswer(Verdict(row["verdict"]), row["person"], row["reason"])
        found.setdefault(row["task_id"], {})[row["item"]] = answer
    return found


async def sheet(connection: AsyncConnection, task_id: str) -> Checklist:
    """The checklist of an experiment, running or finished, with every sign-off. Raises `NotFound`."""
    row = await tasks.get(connection, task_id)
    signed = (await signed_on(connection, [task_id])).get(task_id, {})
    return _sheet(row, signed)


async def sign(
    connection: AsyncConnection, task_id: str, answers: Mapping[str, Answer], *, by: str, at: str
) -> Checklist:
    """Keep a person's answers and give the sheet with them.

    Raises
    ------
    NotFound
    RequestError
        An unknown item, an item that is measured during the test only, or a caution without a reason.
    """
    row = await tasks.get(connection, task_id)
    carried = {item.id for item in _sheet(row, {}).items}
    _check(answers, carried)
    for item, answer in answers.items():
        await sign_offs.put(
            connection, task_id, item=item, verdict=answer.verdict, reason=answer.reason, person=by, at=at
        )
    return await sheet(connection, task_id)


def _sheet(row: Mapping[str, Any], signed: Mapping[str, SignedAnswer]) -> Checklist:
    result = row["result"] or {}
    if result.get("checklist"):
        return with_answers(Checklist.model_validate(result["checklist"]), signed)
    loop = Loop.model_validate(row["loop"])
    request = StartExperiment.model_validate(row["request"])
    start = Start(
        requested_by=row["requested_by"],
        attended=request.attended,
        bench_sentence_signed=request.bench_sentence_signed,
        approver=request.approver,
        acknowledged_by=request.acknowledged_by,
        work_order=request.work_order,
    )
    measurements = measure_before(loop, plan_with_defaults(loop, request), start=start)
    given = answers_of(request, row["requested_by"])
    return assemble(loop.loop_class, ("before",), measurements, {**given, **signed})


def _check(answers: Mapping[str, Answer], carried: set[str]) -> None:
    wrong = []
    for item, answer in answers.items():
        if item not in _IDS:
            wrong.append(FieldProblem(field=item, problem="no such item", allowed=", ".join(sorted(carried))))
        elif item not in carried:
            wrong.append(
                FieldProblem(
                    field=item, problem="not on this experiment's sheet now", allowed=", ".join(sorted(carried))
                )
            )
        elif answer.verdict == "caution" and not answer.reason.strip():
            wrong.append(FieldProblem(field=f"{item}.reason", problem="a caution needs a reason", allowed="text"))
    if not answers:
        wrong.append(FieldProblem(field="", problem="no answers given", allowed="at least one item"))
    if wrong:
        raise RequestError("; ".join(f"{w.field}: {w.problem}" for w in wrong), tuple(wrong))
