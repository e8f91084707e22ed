"""Whether the store is sound, all that is derived included."""

from __future__ import annotations

from sqlalchemy import Connection

from tracker.intake.site_load import site_loads
from tracker.intake.spread import spread_payloads
from tracker.store import care, energy, fleet
from tracker.store import members as on_sites
from tracker.store import readings as held_readings
from tracker.store.engine import Database
from tracker.store.keys import in_parts

#: Sites compared at a time.
SITES_A_BATCH = 500


def check_store(database: Database) -> list[str]:
    """Return a line for everything that is wrong; none when the store is sound."""
    with database.reading() as connection:
        problems = [*care.damaged_tables(connection), *care.damaged_blocks(connection)]
        if not problems:
            problems = [*_stale_energy(connection), *_stale_loads(connection)]
    return problems


def _stale_energy(connection: Connection) -> list[str]:
    """Compare the energy that was spread with what monthly energy and readings give."""
    held = energy.all_spread_blocks(connection)
    made: dict[tuple[int, int], bytes] = {}
    for payloads in spread_payloads(connection):
        made |= {place: payload for place, payload in payloads.items() if payload is not None}
    wrong = {
        key
        for key, month in held.keys() | made.keys()
        if held.get((key, month)) != made.get((key, month))
    }
    names = held_readings.series_names(connection, wrong)
    return [
        f"meter {name}: its monthly energy is not spread as its readings and class give it; import any "
        "file of it anew, or report this"
        for name in sorted(names.values())
    ]


def _stale_loads(connection: Connection) -> list[str]:
    """Compare every site's load with what its readings give."""
    wrong: set[int] = set()
    site_ids = {site["id"]: site["site_id"] for site in fleet.sites(connection)}
    for part in in_parts(sorted(site_ids), SITES_A_BATCH):
        wanted = on_sites.months_of_sites(connection, part)
        for made in site_loads(connection, wanted):
            held = held_readings.held_site_loads(connection, made.month, list(made.payloads))
            wrong |= {
                site
                for site, payload in made.payloads.items()
                if held.get(site, (None, None)) != (payload, made.measured.get(site))
            }
    return [
        f"site {site_ids[site]}: its load is not what its readings give; import any file of its "
        "meters anew, or report this"
        for site in sorted(wrong, key=lambda site: site_ids[site])
    ]
