"""Who may write when a site's lock changes hands."""

from __future__ import annotations

import pytest

from gainwright_service.fence import PATIENCE_S, silent_from

HELD = ("host-41-1a2b3c4d", 1000.0, False)


def test_a_holder_without_its_lock_is_waited_out_for_its_patience_and_its_longest_exit() -> None:
    assert silent_from(HELD, longest_exit_s=94.0, ended_worker="") == 1000.0 + PATIENCE_S + 94.0


@pytest.mark.parametrize(
    ("last", "ended"),
    [(None, ""), (("host-41-1a2b3c4d", 1000.0, True), ""), (HELD, "host-41")],
    ids=["no holder", "let go", "waited for"],
)
def test_one_that_cannot_act_is_not_waited_for(last: tuple[str, float, bool] | None, ended: str) -> None:
    assert silent_from(last, longest_exit_s=94.0, ended_worker=ended) == 0.0


def test_another_process_of_the_same_host_is_waited_for() -> None:
    assert silent_from(HELD, longest_exit_s=0.0, ended_worker="host-4") > 1000.0
