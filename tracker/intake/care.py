"""Whether the store is sound, derived loads included."""

from __future__ import annotations

from sqlalchemy import Connection

from tracker.intake.site_load import site_load_payloads
from tracker.store import care, fleet
from tracker.store import readings as held_readings
from tracker.store.engine import Database
from tracker.store.keys import in_parts


def check_store(database: Database) -> list[str]:
    """Return a line for everything that is wrong; none when the store is sound."""
    with database.reading() as connection:
        problems = [*care.damaged_tables(connection), *care.damaged_blocks(connection)]
        if not problems:
            problems += _stale_loads(connection)
    return problems


def _stale_loads(connection: Connection) -> list[str]:
    """Compare every site's load with what its readings give."""
    problems: list[str] = []
    sites = fleet.sites(connection)
    site_ids = {site["id"]: site["site_id"] for site in sites}
    months = set(held_readings.reading_months(connection))
    derived = held_readings.site_load_months(connection)
    if derived:
        months.update(range(derived[0], derived[1] + 1))
    for part in in_parts([site["id"] for site in sites], 500):
        members = held_readings.site_members(connection, part)
        for month in sorted(months):
            blocks = held_readings.site_load_blocks(connection, part, (month, month))
            held = dict(zip(blocks.key.tolist(), blocks.payload, strict=True))
            made = site_load_payloads(connection, month, part, members)
            problems += [
                f"site {site_ids[site]}: its load is not what its readings give; import any file of "
                "its meters anew, or report this"
                for site in part
                if held.get(site) != made[site]
            ]
    return problems
