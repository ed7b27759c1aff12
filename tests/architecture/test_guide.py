"""The contributors' guide says what the code says."""

from __future__ import annotations

from pathlib import Path

from gainwright_service.experiment.transitions import diagram

GUIDE = Path(__file__).resolve().parents[2] / "DEVELOPERS.md"


def test_the_state_diagram_in_the_guide_is_the_tables() -> None:
    assert diagram() in GUIDE.read_text(), "paste gainwright_service.experiment.transitions.diagram()"
