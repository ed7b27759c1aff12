"""Sites: which worker serves each, and when its lock was last confirmed (seconds since the epoch)."""

from __future__ import annotations

from sqlalchemy import insert, select, update
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.store.tables import sites


async def confirm(connection: AsyncConnection, site: str, worker: str, at_s: float) -> None:
    """Keep that a worker serves the site now."""
    values = {"worker": worker, "confirmed_at": at_s, "released": False}
    changed = await connection.execute(update(sites).where(sites.c.site == site).values(**values))
    if changed.rowcount == 0:
        await connection.execute(insert(sites).values(site=site, **values))


async def release(connection: AsyncConnection, site: str, worker: str) -> None:
    """Keep that a worker has let the site go in good order."""
    await connection.execute(update(sites).where(sites.c.site == site, sites.c.worker == worker).values(released=True))


async def confirmations(connection: AsyncConnection) -> dict[str, float]:
    """When each site was last confirmed; a released one is left out."""
    query = select(sites.c.site, sites.c.confirmed_at).where(sites.c.released.is_(False))
    return {site: float(at) for site, at in (await connection.execute(query)).all()}


async def last_holder(connection: AsyncConnection, site: str) -> tuple[str, float, bool] | None:
    """The worker that served a site last, when it was confirmed, and whether it let go in good order."""
    row = (await connection.execute(select(sites).where(sites.c.site == site))).mappings().first()
    return None if row is None else (row["worker"], float(row["confirmed_at"]), bool(row["released"]))
