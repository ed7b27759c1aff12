"""What recovery needs to know of a test that may have been driving, as one document stored before the first write."""

from __future__ import annotations

from dataclasses import asdict, dataclass, fields
from typing import Any

from gainwright_service.experiment.commands import Facts
from gainwright_service.experiment.plan import Plan
from gainwright_service.experiment.readings import Mode


@dataclass(frozen=True, slots=True)
class Ownership:
    """The plan and the facts of a test, enough to judge whose the output is and to give it back."""

    plan: Plan
    facts: Facts

    @classmethod
    def of(cls, plan: Plan, facts: Facts) -> Ownership:
        """From a running experiment."""
        return cls(plan, facts)

    def document(self) -> dict[str, Any]:
        """As plain values."""
        return {"plan": self.plan.document(), "facts": {**asdict(self.facts), "mode": str(self.facts.mode)}}

    @classmethod
    def from_document(cls, document: dict[str, Any]) -> Ownership:
        """From the stored document; unknown names of a newer version are ignored."""
        plan_names = {field.name for field in fields(Plan)}
        fact_names = {field.name for field in fields(Facts)}
        plan = {name: value for name, value in document["plan"].items() if name in plan_names}
        facts = {name: value for name, value in document["facts"].items() if name in fact_names}
        facts["mode"] = Mode(facts["mode"])
        return cls(Plan(**plan), Facts(**facts))
