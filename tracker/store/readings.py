"""Series and their blocks of readings, site loads; SQL only, values stay packed."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping, Sequence

from sqlalchemy import (
    ColumnElement,
    Connection,
    bindparam,
    delete,
    func,
    insert,
    or_,
    select,
    update,
)

from tracker.store.blocks import BYTES_A_VALUE, HEADER_BYTES, Blocks, n_held, step_of
from tracker.store.keys import among, in_parts
from tracker.store.models import (
    Base,
    MeterConnection,
    Placement,
    ReadingBlock,
    Series,
    SiteLoadBlock,
    SupersededBlock,
    Unit,
)

#: Blocks as a plain table: many are written at a time, and that costs less than as objects.
_BLOCKS = Base.metadata.tables[ReadingBlock.__tablename__]

#: What load is read in, the quantity that says most first; kvar only stands beside kw.
LOAD_QUANTITIES = ("kva", "amps_lv", "amps_hv", "kw", "kvar")


def series_keys(connection: Connection, kind: str, names: Sequence[str]) -> dict[str, int]:
    """Return the key of each series of a kind, adding those that are not known yet."""
    known = _known_series(connection, kind, names)
    missing = [name for name in names if name not in known]
    if missing:
        connection.execute(insert(Series), [{"kind": kind, "name": name} for name in missing])
        known |= _known_series(connection, kind, missing)
    return known


def _known_series(connection: Connection, kind: str, names: Sequence[str]) -> dict[str, int]:
    known: dict[str, int] = {}
    for part in in_parts(names):
        query = select(Series.name, Series.id).where(Series.kind == kind, Series.name.in_(part))
        known.update(dict(connection.execute(query).all()))
    return known


def series_names(connection: Connection, keys: Collection[int]) -> dict[int, str]:
    """Return the name of each series."""
    names: dict[int, str] = {}
    for part in in_parts(sorted(keys)):
        query = select(Series.id, Series.name).where(Series.id.in_(part))
        names.update((row[0], row[1]) for row in connection.execute(query))
    return names


def set_power_factor(connection: Connection, keys: Sequence[int], power_factor: float) -> list[int]:
    """Note the power factor of series; return the keys of those it was another for."""
    changed: list[int] = []
    for part in in_parts(keys):
        other = or_(Series.power_factor.is_(None), Series.power_factor != power_factor)
        query = select(Series.id).where(Series.id.in_(part), other)
        changed += connection.scalars(query)
    for part in in_parts(changed):
        connection.execute(
            update(Series).where(Series.id.in_(part)).values(power_factor=power_factor)
        )
    return changed


def held_blocks(
    connection: Connection, quantity: str, month: int, keys: Sequence[int]
) -> dict[int, bytes]:
    """Return the blocks held of some series for one month: {series key: payload}."""
    held: dict[int, bytes] = {}
    for part in in_parts(sorted(keys)):
        query = select(ReadingBlock.series_key, ReadingBlock.payload).where(
            among(ReadingBlock.series_key, part),
            ReadingBlock.quantity == quantity,
            ReadingBlock.month == month,
        )
        held.update(dict(connection.execute(query).all()))
    return held


def steps_held(connection: Connection, keys: Sequence[int]) -> dict[int, int]:
    """Return the step of the newest block of each of some series [min]: {series key: step}."""
    steps: dict[int, int] = {}
    for part in in_parts(keys):
        newest = (
            select(ReadingBlock.series_key, func.max(ReadingBlock.month).label("month"))
            .where(ReadingBlock.series_key.in_(part))
            .group_by(ReadingBlock.series_key)
            .subquery()
        )
        query = select(ReadingBlock.series_key, ReadingBlock.payload).join(
            newest,
            (ReadingBlock.series_key == newest.c.series_key)
            & (ReadingBlock.month == newest.c.month),
        )
        for series_key, payload in connection.execute(query):
            step = step_of(payload)
            steps[series_key] = min(step, steps.get(series_key, step))
    return steps


def replace_blocks(
    connection: Connection,
    quantity: str,
    month: int,
    payloads: Mapping[int, bytes],
    held: Iterable[int],
) -> None:
    """Write blocks of one month, in place of those of the keys in `held`."""
    held_keys = set(held)
    rows = [
        {"key": key, "n_held": n_held(payload), "payload": payload}
        for key, payload in payloads.items()
    ]
    former = [row for row in rows if row["key"] in held_keys]
    new = [row for row in rows if row["key"] not in held_keys]
    if former:
        connection.execute(
            update(_BLOCKS)
            .where(
                _BLOCKS.c.series_key == bindparam("key"),
                _BLOCKS.c.quantity == quantity,
                _BLOCKS.c.month == month,
            )
            .values(n_held=bindparam("n_held"), payload=bindparam("payload")),
            former,
        )
    if new:
        connection.execute(
            insert(_BLOCKS).values(series_key=bindparam("key"), quantity=quantity, month=month),
            new,
        )


def superseded_block(
    connection: Connection, key: int, quantity: str, month: int, file_key: int
) -> bytes | None:
    """Return what a file has replaced so far in one block; None when nothing."""
    return connection.scalar(
        select(SupersededBlock.payload).where(
            SupersededBlock.series_key == key,
            SupersededBlock.quantity == quantity,
            SupersededBlock.month == month,
            SupersededBlock.replaced_by == file_key,
        )
    )


def keep_superseded(
    connection: Connection, key: int, quantity: str, month: int, file_key: int, payload: bytes
) -> None:
    """Remember what a file replaced in one block."""
    columns = {
        "series_key": key,
        "quantity": quantity,
        "month": month,
        "replaced_by": file_key,
    }
    connection.execute(
        delete(SupersededBlock).where(
            *(getattr(SupersededBlock, name) == value for name, value in columns.items())
        )
    )
    connection.execute(insert(SupersededBlock).values(payload=payload, **columns))


def with_own_power_factor(connection: Connection, keys: Sequence[int]) -> set[int]:
    """Return the meters, of some, that have a power factor of their own in a connection."""
    return _connected(connection, keys, MeterConnection.power_factor.is_not(None))


def connected(connection: Connection, keys: Sequence[int]) -> set[int]:
    """Return the meters, of some, that hang on a site at any time."""
    return _connected(connection, keys)


def _connected(
    connection: Connection, keys: Sequence[int], *conditions: ColumnElement[bool]
) -> set[int]:
    found: set[int] = set()
    for part in in_parts(keys):
        query = select(MeterConnection.meter_key).where(
            MeterConnection.meter_key.in_(part), *conditions
        )
        found.update(connection.scalars(query))
    return found


def unconnected_meters(connection: Connection) -> list[str]:
    """Return the names of meters that have readings and hang on no site."""
    read = select(ReadingBlock.series_key).where(ReadingBlock.series_key == Series.id)
    hangs = select(MeterConnection.id).where(MeterConnection.meter_key == Series.id)
    query = (
        select(Series.name)
        .where(Series.kind == "meter", read.exists(), ~hangs.exists())
        .order_by(Series.name)
    )
    return list(connection.scalars(query))


# --- Where readings count ------------------------------------------------------------------------


def sites_of_series(connection: Connection, keys: Sequence[int]) -> dict[int, list[int]]:
    """Return the sites each series says something of, at any time: {series key: site keys}."""
    sites: dict[int, list[int]] = {}
    for part in in_parts(sorted(keys)):
        by_meter = select(MeterConnection.meter_key, MeterConnection.site_key).where(
            among(MeterConnection.meter_key, part)
        )
        by_unit = (
            select(Series.id, Placement.site_key)
            .join_from(Series, Unit, Series.name == Unit.unit_id)
            .join(Placement, Placement.unit_key == Unit.id)
            .where(Series.kind == "unit", among(Series.id, part))
        )
        for query in (by_meter, by_unit):
            for series_key, site_key in connection.execute(query).all():
                sites.setdefault(series_key, []).append(site_key)
    return sites


def load_blocks(
    connection: Connection, keys: Sequence[int], months: tuple[int, int]
) -> list[tuple[int, int, str, bytes]]:
    """Return (series key, month, quantity, payload) of all load that series hold, both months included."""
    rows: list[tuple[int, int, str, bytes]] = []
    for part in in_parts(keys):
        query = select(
            ReadingBlock.series_key, ReadingBlock.month, ReadingBlock.quantity, ReadingBlock.payload
        ).where(
            among(ReadingBlock.series_key, part),
            ReadingBlock.quantity.in_(LOAD_QUANTITIES),
            ReadingBlock.month.between(*months),
        )
        rows += connection.execute(query).all()
    return rows


def with_gaps(connection: Connection, touched: Collection[tuple[int, int]]) -> set[tuple[int, int]]:
    """Return those of the (series key, month) of which readings are held, but not all."""
    found: set[tuple[int, int]] = set()
    by_month: dict[int, list[int]] = {}
    for key, month in touched:
        by_month.setdefault(month, []).append(key)
    full = func.length(ReadingBlock.payload) - HEADER_BYTES
    for month, keys in by_month.items():
        for part in in_parts(sorted(keys)):
            query = select(ReadingBlock.series_key).where(
                among(ReadingBlock.series_key, part),
                ReadingBlock.quantity.in_(LOAD_QUANTITIES),
                ReadingBlock.month == month,
                ReadingBlock.n_held * BYTES_A_VALUE < full,
            )
            found.update((key, month) for key in connection.scalars(query))
    return found


def months_of_series(connection: Connection, keys: Sequence[int]) -> set[tuple[int, int]]:
    """Return every (series key, month) that readings are held of."""
    found: set[tuple[int, int]] = set()
    for part in in_parts(sorted(keys)):
        query = (
            select(ReadingBlock.series_key, ReadingBlock.month)
            .where(among(ReadingBlock.series_key, part))
            .distinct()
        )
        found.update((row.series_key, row.month) for row in connection.execute(query))
    return found


def load_months(connection: Connection) -> list[int]:
    """Return the months that any reading of load is held of."""
    query = select(ReadingBlock.month).where(ReadingBlock.quantity.in_(LOAD_QUANTITIES))
    return list(connection.scalars(query.distinct().order_by(ReadingBlock.month)))


# --- Site load ------------------------------------------------------------------------------------


def replace_site_load(
    connection: Connection,
    month: int,
    payloads: Mapping[int, bytes | None],
    measured: Mapping[int, bytes | None] | None = None,
) -> None:
    """Write the load of sites for one month; None takes away what was there.

    `measured` holds the share of each value's energy that was measured, where not all of it was.
    """
    for part in in_parts(sorted(payloads)):
        connection.execute(
            delete(SiteLoadBlock).where(
                SiteLoadBlock.month == month, among(SiteLoadBlock.site_key, part)
            )
        )
    shares = measured or {}
    rows = [
        {"site_key": key, "month": month, "payload": payload, "measured": shares.get(key)}
        for key, payload in payloads.items()
        if payload is not None
    ]
    if rows:
        connection.execute(insert(SiteLoadBlock), rows)


def held_site_loads(
    connection: Connection, month: int, site_keys: Sequence[int]
) -> dict[int, tuple[bytes, bytes | None]]:
    """Return the load held of sites for one month: {site key: (payload, measured share)}."""
    held: dict[int, tuple[bytes, bytes | None]] = {}
    for part in in_parts(site_keys):
        query = select(SiteLoadBlock.site_key, SiteLoadBlock.payload, SiteLoadBlock.measured).where(
            SiteLoadBlock.month == month, SiteLoadBlock.site_key.in_(part)
        )
        held.update((row[0], (row[1], row[2])) for row in connection.execute(query))
    return held


def site_load_months(connection: Connection) -> tuple[int, int] | None:
    """Return the first and last month that any site load is held of."""
    first, last = connection.execute(
        select(func.min(SiteLoadBlock.month), func.max(SiteLoadBlock.month))
    ).one()
    return None if first is None else (first, last)


def sites_of_month(connection: Connection, month: int) -> list[int]:
    """Return the sites whose load is held of a month."""
    query = select(SiteLoadBlock.site_key).where(SiteLoadBlock.month == month)
    return list(connection.scalars(query.order_by(SiteLoadBlock.site_key)))


def site_load_blocks(
    connection: Connection, site_keys: Sequence[int], months: tuple[int, int]
) -> Blocks:
    """Return the blocks of sites, both months included."""
    query = (
        select(SiteLoadBlock.site_key, SiteLoadBlock.month, SiteLoadBlock.payload)
        .where(SiteLoadBlock.month.between(*months))
        .order_by(SiteLoadBlock.site_key, SiteLoadBlock.month)
    )
    keys = sorted(site_keys)
    if keys and keys[-1] - keys[0] + 1 == len(keys):  # neighbours all: no need to name each
        named = [query.where(SiteLoadBlock.site_key.between(keys[0], keys[-1]))]
    else:
        named = [query.where(SiteLoadBlock.site_key.in_(part)) for part in in_parts(keys)]
    return Blocks.of([row for each in named for row in connection.execute(each).all()])


def series_blocks(
    connection: Connection, keys: Sequence[int], quantity: str, months: tuple[int, int]
) -> Blocks:
    """Return the blocks of one quantity of some series, both months included."""
    query = (
        select(ReadingBlock.series_key, ReadingBlock.month, ReadingBlock.payload)
        .where(ReadingBlock.quantity == quantity, ReadingBlock.month.between(*months))
        .order_by(ReadingBlock.series_key, ReadingBlock.month)
    )
    named = (query.where(ReadingBlock.series_key.in_(part)) for part in in_parts(sorted(keys)))
    return Blocks.of([row for each in named for row in connection.execute(each).all()])


def reading_months(connection: Connection) -> list[int]:
    """Return the months that any reading is held of."""
    return list(
        connection.scalars(select(ReadingBlock.month).distinct().order_by(ReadingBlock.month))
    )
