"""Load that no meter reads, such as street lights: so many kW, always or from dusk to dawn."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from typing import Any

from sqlalchemy import Connection

from tracker.intake.register import Column, read_register
from tracker.intake.report import Fates, Finding, Findings, Outcome
from tracker.intake.site_load import derive_after
from tracker.intake.source import Source
from tracker.store import energy, fleet
from tracker.store.members import ALWAYS, DUSK_TO_DAWN

COLUMNS = (
    Column("site_id", required=True),
    Column("kw", "number", low=0, high=1e5, required=True),
    Column("hours", required=True),
)


def take_unmetered(connection: Connection, source: Source, file_key: int) -> Outcome:
    """Take unmetered load into the store, and derive the load of the sites it is at.

    Raises
    ------
    IntakeError
        If a required heading is missing, or the file cannot be read to its end.
    """
    rows = read_register(source, COLUMNS)
    sites = {site["site_id"]: site for site in fleet.sites(connection)}
    held = energy.unmetered_rows(connection)
    fates = Fates()
    findings: list[Finding] = []
    seen: set[tuple[int, str]] = set()
    new: dict[tuple[int, str], float] = {}
    for ordinal, site_id, kw, text in rows.frame[["site_id", "kw", "hours"]].itertuples():
        place = _place(ordinal, site_id, text, sites, seen)
        if isinstance(place, Finding):
            findings.append(place)
            continue
        seen.add(place)
        if place in held and held[place][1] == kw:
            fates.unchanged += 1
            continue
        new[place] = kw
        if place in held:
            fates.corrected += 1
        else:
            fates.taken += 1
    energy.replace_unmetered(
        connection, new, [held[place][0] for place in new if place in held], file_key
    )
    derived = derive_after(connection, sites={site for site, _ in new})
    return Outcome(
        fates,
        Findings.of([*rows.findings, *findings]),
        source.left_out([column.heading for column in COLUMNS]),
        derived.notes(),
        derived.as_facts(),
    )


def _place(
    ordinal: int,
    site_id: str,
    text: str,
    sites: Mapping[str, Mapping[str, Any]],
    seen: Collection[tuple[int, str]],
) -> tuple[int, str] | Finding:
    """Return the site's key and its hours, or why a row cannot be taken."""
    hours = " ".join(text.casefold().replace("-", " ").split())
    if hours not in (ALWAYS, DUSK_TO_DAWN):
        reason = f"hours = {text[:40]!r} is not known; allowed: {ALWAYS}, {DUSK_TO_DAWN}"
        return Finding(ordinal, "hours", "hours.unknown", reason)
    if site_id not in sites:
        reason = f"site {site_id} is in no units file yet; import its unit first"
        return Finding(ordinal, "site_id", "site_id.unknown", reason)
    site = sites[site_id]
    if hours == DUSK_TO_DAWN and (site["latitude"] is None or site["longitude"] is None):
        reason = (
            f"site {site_id} has no latitude and longitude, which tell when it is dark there; give "
            f"them in the units file, or say {ALWAYS}"
        )
        return Finding(ordinal, "hours", "hours.no_latitude", reason)
    if (site["id"], hours) in seen:
        reason = f"an earlier row is of site {site_id}, {hours} too; add their kW up in one row"
        return Finding(ordinal, "site_id", "site_id.twice", reason)
    return site["id"], hours
