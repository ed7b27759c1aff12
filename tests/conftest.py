"""What holds for every test: a clean environment, no leaked threads, no leaked child processes."""

from __future__ import annotations

import multiprocessing
import os
import threading
from collections.abc import Iterator

import pytest

# One BLAS thread: tiny matrices gain nothing from more, and two cores are shared with the tests' own processes.
for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(name, "1")


@pytest.fixture(autouse=True)
def _clean_environment(monkeypatch: pytest.MonkeyPatch) -> None:
    """No setting of the person who runs the tests reaches them."""
    for name in list(os.environ):
        if name.startswith("GAINWRIGHT_"):
            monkeypatch.delenv(name)


@pytest.fixture(autouse=True)
def _nothing_leaked(request: pytest.FixtureRequest) -> Iterator[None]:
    """A test leaves no thread of its own and no child process behind."""
    before = set(threading.enumerate())
    yield
    # anyio's idle threads end by themselves with their event loop; a thread told to end may still be ending.
    started = [t for t in threading.enumerate() if t not in before and not t.daemon and not t.name.startswith("AnyIO")]
    for thread in started:
        thread.join(2.0)
    left = [f"{thread.name} ({type(thread).__name__})" for thread in started if thread.is_alive()]
    assert not left, f"threads left running: {left}"
    children = [child.name for child in multiprocessing.active_children()]
    assert not children, f"child processes left running: {children}"
