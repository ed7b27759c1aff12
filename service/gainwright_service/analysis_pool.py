"""The analysis pool: processes of their own for analyses, so that no tick ever waits for a fit.

Owns the processes and their death: a process that dies takes the analyses under way with it; those are tried once more,
since an analysis drives nothing.
"""

from __future__ import annotations

import asyncio
import multiprocessing
import os
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from typing import Any, TypeVar

from gainwright_service.errors import ServiceError

T = TypeVar("T")

LONGEST_S = 60.0


class AnalysisFailed(ServiceError):
    """An analysis took too long, or its process died twice."""


class AnalysisPool:
    """Analyses in a process of their own, one after the other."""

    def __init__(self) -> None:
        self._pool: ProcessPoolExecutor | None = None
        # As many as run at once: the clock of an analysis starts with it, and its end takes no other with it.
        self._slot = asyncio.Lock()

    async def run(self, function: Callable[..., T], *arguments: Any) -> T:
        """Call ``function`` in an analysis process; its errors come back as they are.

        Raises
        ------
        AnalysisFailed
        """
        async with self._slot:
            for _ in range(2):
                pool = self._open()
                try:
                    async with asyncio.timeout(LONGEST_S):
                        return await asyncio.get_running_loop().run_in_executor(pool, function, *arguments)
                except BrokenProcessPool:
                    self.close()
                except TimeoutError as error:
                    self.close()
                    raise AnalysisFailed(f"the analysis took more than {LONGEST_S:g} s") from error
            raise AnalysisFailed("the analysis process died twice")

    def close(self) -> None:
        """End the processes."""
        pool, self._pool = self._pool, None
        if pool is None:
            return
        processes = list((getattr(pool, "_processes", None) or {}).values())
        # The pool's own thread watches its processes and ends once it has seen them die; waited for, with a bound.
        watching = getattr(pool, "_executor_manager_thread", None)
        pool.shutdown(wait=False, cancel_futures=True)
        for process in processes:
            process.kill()
        for process in processes:
            process.join(2.0)
        if watching is not None:
            watching.join(2.0)

    def _open(self) -> ProcessPoolExecutor:
        if self._pool is None:
            self._pool = ProcessPoolExecutor(1, mp_context=multiprocessing.get_context("spawn"), initializer=_begin)
        return self._pool


def _begin() -> None:
    """An analysis process: one thread of linear algebra, polite to the process that ticks, deaf to Ctrl-C."""
    import signal

    for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ[name] = "1"
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    os.nice(5)
