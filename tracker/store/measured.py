"""How much of a site's load was measured; SQL only where some was not."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, select

from tracker.errors import StoreError
from tracker.store.blocks import values_a_month
from tracker.store.keys import in_parts
from tracker.store.models import SiteLoadBlock

#: The share of a value that was measured whole; shares are kept in 1/200.
ALL_MEASURED = 200


@dataclass(frozen=True, slots=True)
class MeasuredBlock:
    """One site and month of which not all was measured."""

    site_key: int
    month: int
    share: NDArray[np.uint8]  #: of each value's energy, shape (n_value,) [1/200]
    step_min: int


def measured_blocks(
    connection: Connection, site_keys: Sequence[int], months: tuple[int, int]
) -> list[MeasuredBlock]:
    """Return the measured shares of sites, both months included, by site and month.

    Site-months that were measured whole have none: the database tells them by the row's header,
    without reading the load.

    Raises
    ------
    StoreError
        If one does not fit its month.
    """
    found = (
        select(SiteLoadBlock.site_key, SiteLoadBlock.month, SiteLoadBlock.measured)
        .where(SiteLoadBlock.month.between(*months), SiteLoadBlock.measured.is_not(None))
        .order_by(SiteLoadBlock.site_key, SiteLoadBlock.month)
    )
    rows = [
        row
        for part in in_parts(sorted(site_keys))
        for row in connection.execute(found.where(SiteLoadBlock.site_key.in_(part)))
    ]
    return [
        MeasuredBlock(
            row.site_key,
            row.month,
            np.frombuffer(row.measured, dtype=np.uint8),
            _step_min(row.month, len(row.measured)),
        )
        for row in rows
    ]


def _step_min(month: int, n_value: int) -> int:
    step_min, left_over = divmod(values_a_month(month, 1), max(n_value, 1))
    if left_over:
        raise StoreError(
            f"the store is damaged: {n_value} measured shares do not fit a month. "
            "`tracker store check` names the place; restore a backup."
        )
    return step_min
