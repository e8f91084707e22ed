"""What makes a connection doubtful."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class DoubtSettings:
    """What makes a connection doubtful; the figures are ours, chosen on invented fleets."""

    days: int = 366  #: looked at, back from the newest load
    least_known_h: float = 168.0  #: hours of known load before a unit is judged
    peak_share: float = 0.005  #: share of the known hours that exceed what is called peak here
    impossible_pct: float = 200.0  #: load no unit carries for hours on end, of its rating
    impossible_h: float = 6.0  #: hours of it in a UTC day
    impossible_days: int = 3  #: days of that
    idle_peak_pct: float = 2.0  #: peak load below which a unit has next to no load, of its rating
    idle_kva_a_customer: float = 0.05  #: and mean load below which its customers have
    least_units: int = 12  #: units of a fleet or feeder before others are compared with them
    far: float = 3.5  #: robust standard deviations that meters per kVA are far off
    uncommon: float = 2.0  #: and from which a peak load is odd
    possible: float = 2.75  #: within which both peaks must lie after a move
    least_gain: float = 16.0  #: by which a move must shrink the squares of both sites' distances
    stands_out: float = (
        2.0  #: times its site's other meters, from which a meter's peak needs half of it
    )
    neighbours: int = 30  #: sites of the feeder a meter is moved to, the nearest
    within_km: float = 5.0  #: and how far they may be away
