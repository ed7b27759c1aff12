"""The controller's gains as found, read before a test and never written by it."""

from __future__ import annotations

from dataclasses import asdict

from gainwright_service.adapters.port import LoopAdapter
from gainwright_service.errors import AdapterError


async def gains_found(adapter: LoopAdapter) -> dict[str, float | None] | None:
    """The gains in the controller's own form and units; None where the device does not tell them.

    A device that fails here fails again at the test's first reading, which says so; the test does not need the gains.
    """
    if not adapter.capabilities.gains_readable:
        return None
    try:
        return asdict(await adapter.read_gains())
    except AdapterError:
        return None
