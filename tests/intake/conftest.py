"""A store that is filled without files: what is derived of its readings, and nothing else."""

from __future__ import annotations

import datetime as dt
import shutil
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from sqlalchemy import insert, select

from tracker.intake.care import check_store
from tracker.intake.marks import Mark, reading_marks
from tracker.intake.rules import set_rules
from tracker.intake.site_load import Derived, derive, derive_after
from tracker.store import energy, ledger
from tracker.store import readings as held_readings
from tracker.store.blocks import (
    Quality,
    month_of,
    month_start_s,
    pack,
    step_of,
    unpack,
    values_a_month,
)
from tracker.store.models import MeterConnection, Placement, Site, SiteLoadBlock, SpreadBlock, Unit
from tracker.store.schema import open_database

HELD = int(Quality.HELD)


def moment(text: str | None) -> dt.datetime | None:
    """Return a moment in UTC."""
    return None if text is None else dt.datetime.fromisoformat(text).replace(tzinfo=dt.UTC)


class Ground:
    """A store with sites, units and meters, to which readings are given by the array."""

    def __init__(self, path: Path) -> None:
        self.database = open_database(f"sqlite:///{path}")
        self._sites: dict[str, int] = {}

    def site(self, name: str = "S", **columns: Any) -> int:
        """Return the key of a site, making it."""
        if name not in self._sites:
            with self.database.writing() as connection:
                row = insert(Site).values(site_id=name, **columns)
                self._sites[name] = connection.execute(row).inserted_primary_key[0]
        return self._sites[name]

    def unit(
        self,
        rated_kva: float = 25.0,
        site: str = "S",
        *,
        name: str | None = None,
        starts: str | None = None,
        ends: str | None = None,
        **columns: Any,
    ) -> None:
        """Put a unit at a site."""
        site_key = self.site(site)
        with self.database.writing() as connection:
            unit = insert(Unit).values(unit_id=name or f"T-{site}", rated_kva=rated_kva, **columns)
            key = connection.execute(unit).inserted_primary_key[0]
            connection.execute(
                insert(Placement).values(
                    unit_key=key, site_key=site_key, starts_at=moment(starts), ends_at=moment(ends)
                )
            )

    def meter(
        self,
        name: str,
        site: str = "S",
        *,
        starts: str | None = None,
        ends: str | None = None,
        multiplier: float = 1.0,
        power_factor: float | None = 1.0,
    ) -> Derived:
        """Connect a meter."""
        site_key = self.site(site)
        with self.database.writing() as connection:
            key = held_readings.series_keys(connection, "meter", [name])[name]
            connection.execute(
                insert(MeterConnection).values(
                    meter_key=key,
                    site_key=site_key,
                    starts_at=moment(starts),
                    ends_at=moment(ends),
                    multiplier=multiplier,
                    power_factor=power_factor,
                )
            )
            return derive_after(connection, sites=[site_key], meters=[key])

    def read(
        self,
        name: str,
        values: Any,
        start: str = "2025-07-01",
        *,
        step_min: int = 60,
        quantity: str = "kw",
        kind: str = "meter",
        flags: int = HELD,
    ) -> Derived:
        """Give readings of a series from a moment on, NaN where there is none; derive loads."""
        values = np.asarray(values, dtype=np.float32)
        first = int(moment(start).timestamp()) // (60 * step_min)
        touched = set()
        with self.database.writing() as connection:
            key = held_readings.series_keys(connection, kind, [name])[name]
            at_s = (first + np.arange(len(values))) * 60 * step_min
            months = np.array([month_of(int(second)) for second in at_s])
            for month in np.unique(months[~np.isnan(values)]).tolist():
                held = held_readings.held_blocks(connection, quantity, month, [key])
                if key in held:
                    assert step_of(held[key]) == step_min
                    block, block_flags = (each[0].copy() for each in unpack([held[key]]))
                else:
                    block = np.full(values_a_month(month, step_min), np.nan, dtype=np.float32)
                    block_flags = np.zeros(len(block), dtype=np.uint8)
                here = (months == month) & ~np.isnan(values)
                places = (at_s[here] - month_start_s(month)) // (60 * step_min)
                block[places], block_flags[places] = values[here], flags
                payload = pack(block[np.newaxis], block_flags[np.newaxis], step_min)[0]
                held_readings.replace_blocks(connection, quantity, month, {key: payload}, held)
                touched.add((key, month))
            return derive(connection, touched)

    def energy(
        self, name: str, kwh: float, starts: str = "2025-07-01", ends: str = "2025-08-01"
    ) -> Derived:
        """Give the energy of a meter from a moment to a moment, in place of what is held of it."""
        starts_at, ends_at = moment(starts), moment(ends)
        with self.database.writing() as connection:
            key = held_readings.series_keys(connection, "meter", [name])[name]
            former = [
                row.key
                for row in energy.monthly_energy(connection, [key])
                if row.starts_at == starts_at
            ]
            file_key = ledger.open_entry(connection, kind="monthly", name="-", options={})
            row = energy.MeterEnergy(0, key, starts_at, ends_at, kwh)
            energy.replace_energy(connection, [row], former, file_key)
            return derive_after(connection, meters=[key])

    def classes(self, **names: str) -> Derived:
        """Give meters a class."""
        with self.database.writing() as connection:
            keys = held_readings.series_keys(connection, "meter", list(names))
            former = energy.classes(connection, keys.values())
            energy.set_classes(connection, {keys[name]: text for name, text in names.items()})
            return derive_after(connection, meters=keys.values(), classes=former.values())

    def unmetered(self, kw: float, hours: str = "always", site: str = "S") -> Derived:
        """Give a site load that no meter reads."""
        with self.database.writing() as connection:
            file_key = ledger.open_entry(connection, kind="unmetered", name="-", options={})
            place = self.site(site), hours
            held = energy.unmetered_rows(connection)
            former = [held[place][0]] if place in held else []
            energy.replace_unmetered(connection, {place: kw}, former, file_key)
            return derive_after(connection, sites=[self.site(site)])

    def rules(self, **values: float) -> Derived:
        """Set rules of validation and filling."""
        with self.database.writing() as connection:
            return set_rules(connection, values)

    def marks(self, **chosen: Any) -> list[Mark]:
        """Return what the rules find."""
        with self.database.reading() as connection:
            return list(reading_marks(connection, **chosen))

    def load(self, site: str = "S") -> pd.Series:
        """Return the load of a site [kVA]."""
        return self._table(site)["load"]

    def flags(self, site: str = "S") -> pd.Series:
        """Return the quality flags of a site's load."""
        return self._table(site)["flags"].astype(int)

    def measured(self, site: str = "S") -> pd.Series:
        """Return the share of a site's load that was measured; 1 where nothing else is said."""
        return self._table(site)["measured"]

    def _table(self, site: str) -> pd.DataFrame:
        query = (
            select(SiteLoadBlock.month, SiteLoadBlock.payload, SiteLoadBlock.measured)
            .where(SiteLoadBlock.site_key == self._sites[site])
            .order_by(SiteLoadBlock.month)
        )
        pieces = [pd.DataFrame({"load": [], "flags": [], "measured": []})]
        with self.database.reading() as connection:
            for month, payload, measured in connection.execute(query):
                values, flags = unpack([payload])
                start_s = month_start_s(month) + 60 * step_of(payload) * np.arange(len(flags[0]))
                share = np.full(len(flags[0]), 200, dtype=np.uint8)
                if measured is not None:
                    share = np.frombuffer(measured, dtype=np.uint8)
                piece = pd.DataFrame(
                    {"load": values[0].astype(float), "flags": flags[0], "measured": share / 200},
                    index=pd.to_datetime(start_s, unit="s", utc=True),
                )
                pieces.append(piece[piece["flags"] != 0])
        return pd.concat(pieces[1:] or pieces)

    def dump(self) -> dict[tuple[str, int], tuple[bytes, bytes | None]]:
        """Return all site loads as they are held, by site id and month."""
        query = select(
            Site.site_id, SiteLoadBlock.month, SiteLoadBlock.payload, SiteLoadBlock.measured
        ).join_from(Site, SiteLoadBlock, SiteLoadBlock.site_key == Site.id)
        with self.database.reading() as connection:
            return {(row[0], row[1]): (row[2], row[3]) for row in connection.execute(query)}

    def spread(self, name: str) -> pd.Series:
        """Return the spread energy of a meter [kW]."""
        with self.database.reading() as connection:
            key = held_readings.series_keys(connection, "meter", [name])[name]
            rows = connection.execute(
                select(SpreadBlock.month, SpreadBlock.payload)
                .where(SpreadBlock.series_key == key)
                .order_by(SpreadBlock.month)
            ).all()
        pieces = []
        for month, payload in rows:
            values, flags = unpack([payload])
            start_s = month_start_s(month) + 60 * step_of(payload) * np.arange(len(flags[0]))
            index = pd.to_datetime(start_s, unit="s", utc=True)
            pieces.append(pd.Series(values[0].astype(float), index=index)[flags[0] != 0])
        return pd.concat(pieces) if pieces else pd.Series(dtype=float)

    def problems(self) -> list[str]:
        """Return what `store check` finds wrong."""
        return check_store(self.database)


@pytest.fixture
def new_ground(tmp_path: Path, empty_store: Path) -> Iterator[Callable[[], Ground]]:
    """Make stores, each a copy of an empty one."""
    made: list[Ground] = []

    def make() -> Ground:
        path = tmp_path / f"ground-{len(made)}.db"
        shutil.copy(empty_store, path)
        made.append(Ground(path))
        return made[-1]

    yield make
    for each in made:
        each.database.close()


@pytest.fixture
def ground(new_ground: Callable[[], Ground]) -> Ground:
    """A store with one 25 kVA unit at site S."""
    one = new_ground()
    one.unit()
    return one
