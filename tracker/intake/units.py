"""The register of units: nameplates, and where each unit stands."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping
from collections.abc import Set as AbstractSet
from dataclasses import replace
from typing import Any
from zoneinfo import ZoneInfo

import pandas as pd
from sqlalchemy import Connection

from tracker.errors import ModelRangeError
from tracker.fleet.nameplate import COOLING_FLOW, completed
from tracker.intake.register import Column, read_register
from tracker.intake.report import Fates, Finding, Findings, Outcome
from tracker.intake.site_load import Derived, derive_after
from tracker.intake.source import Source
from tracker.intake.stays import NEW, Numbers, StayBook, span_of
from tracker.store import fleet
from tracker.store import members as on_sites
from tracker.store.fleet import Stay
from tracker.store.models import Placement, Site, Unit

COLUMNS = (
    Column("unit_id", required=True),
    Column("rated_kva", "number", above=0, high=1e6, required=True),
    Column("feeder"),
    Column("site_id"),
    Column("installed_on", "date"),
    Column("removed_on", "date"),
    Column("phases", "whole", numbers=(1, 3)),
    Column("hv_volts", "number", above=0, high=1e6),
    Column("lv_volts", "number", above=0, high=1e6),
    Column("impedance_pct", "number", above=0, high=100),
    Column("winding_rise_c", "number", numbers=(55, 65)),
    Column("cooling", choices=tuple(COOLING_FLOW)),
    Column("mounting", choices=("pole", "pad", "platform", "vault")),
    Column("year_made", "whole", low=1880, high=2200),
    Column("no_load_loss_w", "number", above=0, high=1e7),
    Column("load_loss_w", "number", above=0, high=1e7),
    Column("latitude", "number", low=-90, high=90),
    Column("longitude", "number", low=-180, high=180),
    Column("customers", "whole", low=0, high=1e6),
    Column("critical_customers", "whole", low=0, high=1e6),
    Column("weather_station"),
    Column("loss_ratio", "number", above=0, high=1e4),
    Column("top_oil_rise_c", "number", above=0, high=200),
    Column("hot_spot_rise_c", "number", above=0, high=300),
    Column("oil_exponent", "number", above=0, high=2),
    Column("winding_exponent", "number", above=0, high=2),
    Column("top_oil_time_constant_h", "number", above=0, high=100),
    Column("winding_time_constant_h", "number", above=0, high=10),
)

#: Columns that a site's load depends on: the rules look at ratings, amperes need volts and phases.
OF_LOAD = frozenset({"rated_kva", "phases", "hv_volts", "lv_volts"})
#: Columns that lights from dusk to dawn depend on.
OF_DAYLIGHT = frozenset({"latitude", "longitude"})

#: Columns that changed, by id.
Changed = Mapping[str, AbstractSet[str]]


def take_units(connection: Connection, source: Source, zone: ZoneInfo | None) -> Outcome:
    """Take a register of units into the store.

    Raises
    ------
    IntakeError
        If a required heading is missing, or the file cannot be read to its end.
    """
    rows = read_register(source, COLUMNS)
    frame = rows.frame
    frame, findings = _checked_nameplates(frame)
    frame, contradictions = _without_contradictions(frame)
    findings += contradictions
    given = {column.heading for column in COLUMNS if source.has(column.heading)}
    plan = _Plan(connection, zone)
    home = frame["unit_id"] if "site_id" in given else frame["unit_id"].map(plan.home)
    frame["site_id"] = frame["site_id"].where(frame["site_id"].notna(), home)
    plan.decide(frame, given)
    frame = frame.drop(index=[finding.ordinal for finding in plan.findings])
    changed_sites = _put_sites(connection, frame, given)
    changed_units = _put_units(connection, frame, given)
    moved = plan.write(connection)
    derived = _derived(connection, changed_units, changed_sites, moved)
    return Outcome(
        _fates(frame, plan.fate, changed_units.keys(), changed_sites.keys()),
        Findings.of([*rows.findings, *findings, *plan.findings]),
        source.left_out([column.heading for column in COLUMNS]),
        derived.notes(),
        derived.as_facts(),
    )


def _derived(
    connection: Connection, units: Changed, sites: Changed, moved: Collection[int]
) -> Derived:
    """Derive anew the load of sites that a changed unit or place touches.

    Parameters
    ----------
    units, sites : mapping of id to changed columns
    moved : collection of int
        Sites at which another unit stands than before.
    """
    unit_keys = _keys(fleet.units(connection, units.keys()), "unit_id")
    rated = [unit_keys[name] for name, columns in units.items() if columns & OF_LOAD]
    touched = {stay.site_key for stay in fleet.placements(connection, rated)} | set(moved)
    site_keys = _keys(fleet.sites(connection), "site_id")
    touched |= {site_keys[name] for name, columns in sites.items() if columns & OF_DAYLIGHT}
    on_feeder = [site_keys[name] for name, columns in sites.items() if "feeder" in columns]
    members = on_sites.site_members(connection, on_feeder)
    meters = {member.series_key for member in members if not member.whole_site}
    return derive_after(connection, sites=touched, meters=meters)


class _Plan:
    """Decides where each unit of the file stands, before anything is written."""

    def __init__(self, connection: Connection, zone: ZoneInfo | None) -> None:
        self._zone = zone
        self._units = Numbers(_keys(fleet.units(connection), "unit_id"))
        self._sites = Numbers(_keys(fleet.sites(connection), "site_id"))
        self._book = StayBook.of(fleet.placements(connection))
        self.findings: list[Finding] = []
        self.fate: dict[int, str] = {}

    def home(self, unit_id: str) -> str:
        """Return the site a unit stood at last; its own id when it stood nowhere yet."""
        stays = self._book.held.get(self._units.of(unit_id))
        return self._sites.name(stays[-1].site_key) if stays else unit_id

    def decide(self, frame: pd.DataFrame, given: set[str]) -> None:
        """Give each row a fate, or a finding.

        Rows are taken in the order in which the stays end, so that a site is free for the unit that
        follows, whatever the order of the file. A file without the columns that say where or when a
        unit stands leaves what is held of it.
        """
        columns = ["unit_id", "site_id", "installed_on", "removed_on"]
        by_end = frame[columns].sort_values("removed_on", kind="stable", na_position="last")
        for ordinal, unit_id, site_id, installed, removed in by_end.itertuples():
            unit = self._units.of(unit_id)
            site = self._sites.of(site_id)
            stood_there = any(held.site_key == site for held in self._book.held.get(unit, ()))
            if stood_there and not given & {"installed_on", "removed_on"}:
                self.fate[ordinal] = "unchanged"
                continue
            span, wrong = span_of(installed, removed, self._zone)
            stay = Stay(NEW, unit, site, span)
            code, reason = "removed_on.too_early", f"unit {unit_id} {wrong}"
            if wrong is None:
                code, reason = self._obstacle(unit_id, site_id, stay)
            if reason:
                self.findings.append(Finding(ordinal, code.partition(".")[0], code, reason))
            else:
                self.fate[ordinal] = self._book.put(stay)

    def _obstacle(self, unit_id: str, site_id: str, stay: Stay) -> tuple[str, str]:
        elsewhere = self._book.clash(stay)
        if elsewhere is not None:
            return (
                "unit_id.two_places",
                (
                    f"unit {unit_id} stands at site {self._sites.name(elsewhere.site_key)} "
                    f"{elsewhere.span}, at the same time; give that stay a removed_on first"
                ),
            )
        other = self._book.neighbour(stay)
        if other is not None:
            return (
                "site_id.occupied",
                (
                    f"unit {self._units.name(other.who)} stands at site {site_id} {other.span}, at the "
                    "same time; give it a removed_on, or this unit a site of its own"
                ),
            )
        return "", ""

    def write(self, connection: Connection) -> set[int]:
        """Write the placements; return the sites at which one began, ended or changed."""
        unit_keys = self._units.keys(_keys(fleet.units(connection), "unit_id"))
        site_keys = self._sites.keys(_keys(fleet.sites(connection), "site_id"))
        added = [
            replace(stay, who=unit_keys[stay.who], site_key=site_keys[stay.site_key])
            for stay in self._book.added
        ]
        fleet.remove_stays(connection, Placement, [stay.key for stay in self._book.removed])
        fleet.add_placements(connection, added)
        return {stay.site_key for stay in [*added, *self._book.removed]}


def _keys(rows: Iterable[Mapping[str, Any]], name: str) -> dict[str, int]:
    return {row[name]: row["id"] for row in rows}


def _fates(
    frame: pd.DataFrame,
    placed: Mapping[int, str],
    units: Collection[str],
    sites: Collection[str],
) -> Fates:
    """A row is corrected when its unit, its place, or what it last says of the site changed."""
    last_of_site = frame.index[~frame["site_id"].duplicated(keep="last")]
    fates = Fates()
    for ordinal, unit_id, site_id in frame[["unit_id", "site_id"]].itertuples():
        fate = placed[ordinal]
        changed = unit_id in units or (site_id in sites and ordinal in last_of_site)
        if fate == "unchanged" and changed:
            fate = "corrected"
        setattr(fates, fate, getattr(fates, fate) + 1)
    return fates


def _checked_nameplates(frame: pd.DataFrame) -> tuple[pd.DataFrame, list[Finding]]:
    """Refuse rows whose rises, given or assumed, contradict each other."""
    findings: list[Finding] = []
    suspects = frame[frame["hot_spot_rise_c"].notna() | frame["top_oil_rise_c"].notna()]
    for ordinal, row in suspects.iterrows():
        try:
            completed(fleet.nameplate(row.to_dict()))
        except ModelRangeError as error:
            findings.append(
                Finding(int(str(ordinal)), "hot_spot_rise_c", "hot_spot_rise_c.too_low", str(error))
            )
    return frame.drop(index=[finding.ordinal for finding in findings]), findings


def _without_contradictions(frame: pd.DataFrame) -> tuple[pd.DataFrame, list[Finding]]:
    """Refuse rows that say other of a unit than an earlier row does; a blank says nothing."""
    columns = list(fleet.UNIT_COLUMNS)
    first = frame.groupby("unit_id", sort=False)[columns].transform("first")
    other = frame[columns].notna() & (frame[columns] != first)
    findings: list[Finding] = []
    for ordinal in other.index[other.any(axis=1)].tolist():
        column = str(other.loc[ordinal].idxmax())
        value, earlier = str(frame.loc[ordinal, column]), str(first.loc[ordinal, column])
        reason = (
            f"{column} = {value} contradicts an earlier row of unit "
            f"{str(frame.loc[ordinal, 'unit_id'])!r}, which says {earlier}"
        )
        findings.append(Finding(ordinal, column, f"{column}.two_values", reason))
    return frame.drop(index=[finding.ordinal for finding in findings]), findings


def _put_sites(connection: Connection, frame: pd.DataFrame, given: set[str]) -> Changed:
    """Write the sites of the file; return what changed of which.

    Where several rows are of one site, the last that says something counts. What the file has no
    column for, a site that is held keeps.
    """
    named = frame.groupby("site_id", sort=False)[list(fleet.SITE_COLUMNS)].last()
    return _put(connection, Site, named, fleet.sites(connection), given)


def _put_units(connection: Connection, frame: pd.DataFrame, given: set[str]) -> Changed:
    """Write the nameplates of the file; return what changed of which."""
    named = frame.groupby("unit_id", sort=False)[list(fleet.UNIT_COLUMNS)].first()
    return _put(connection, Unit, named, fleet.units(connection), given)


def _put(
    connection: Connection,
    table: type[Unit] | type[Site],
    named: pd.DataFrame,
    rows_held: Iterable[dict[str, Any]],
    given: set[str],
) -> Changed:
    """Write rows that their index names; return the columns that changed of those held."""
    id_column = str(named.index.name)
    wanted = named.astype(object).where(named.notna(), None)
    held = {row[id_column]: row for row in rows_held}
    changed: dict[str, set[str]] = {}
    new: list[dict[str, Any]] = []
    for row in wanted.reset_index().to_dict("records"):
        values = {str(name): value for name, value in row.items()}
        name = values[id_column]
        if name not in held:
            new.append(values)
            continue
        said = {column: value for column, value in values.items() if column in given}
        other = {column for column, value in said.items() if held[name][column] != value}
        if other:
            fleet.change_row(connection, table, held[name]["id"], said)
            changed[name] = other
    fleet.add_rows(connection, table, new)
    return changed
