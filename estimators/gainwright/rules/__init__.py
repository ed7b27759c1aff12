"""Published tuning rules: `rule` says what one is, `table` lists them, the other modules hold their functions."""

from __future__ import annotations

from gainwright.rules.from_model import series_to_ideal
from gainwright.rules.rule import Kind, Knowledge, Needs, Rule
from gainwright.rules.table import REFERENCE_RULES, RULES, rules_by_name

__all__ = ["REFERENCE_RULES", "RULES", "Kind", "Knowledge", "Needs", "Rule", "rules_by_name", "series_to_ideal"]
