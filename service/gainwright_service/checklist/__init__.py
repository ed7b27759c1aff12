"""The safe-limit checklist: one table of items, what can be measured of them, and a person's answers.

Owns the questions, the thresholds and the counting. Knows no database, no device and no HTTP.
"""

from gainwright_service.checklist.after import Conclusion, measure_after, measure_during
from gainwright_service.checklist.before import Listening, Start, measure_before
from gainwright_service.checklist.item import Item
from gainwright_service.checklist.items import ITEMS, NOTICE, asked_of
from gainwright_service.checklist.record import measure_record
from gainwright_service.checklist.sheet import SignedAnswer, assemble, blocking, with_answers

__all__ = [
    "ITEMS",
    "NOTICE",
    "Conclusion",
    "Item",
    "Listening",
    "SignedAnswer",
    "Start",
    "asked_of",
    "assemble",
    "blocking",
    "measure_after",
    "measure_before",
    "measure_during",
    "measure_record",
    "with_answers",
]
