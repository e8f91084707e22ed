"""What every reader of a computed temperature has to know; shown wherever the figures are."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Caution:
    """A warning: its matter in a few words, and a sentence or two."""

    matter: str
    text: str


#: The one that must be read even where there is room for no other.
NO_PERMISSION = Caution(
    "A computed temperature is no permission to energise, re-fuse or load a unit.",
    "The utility's own loading policy, the maker's data, local codes and licensed practice decide.",
)

#: All of them. Bubbles: Energies 18(17) 4579 (seen). PCB: 40 CFR 761.2 (seen).
#: Other limits, venting: both loading guides (from memory).
CAUTIONS = (
    NO_PERMISSION,
    Caution(
        "The winding is not the only limit.",
        "Bushings, leads, connectors, fuse, tap changer and oil expansion may give out first. "
        "Overload heats the oil; a tank can vent: keep clear.",
    ),
    Caution(
        "Bubbles form early in wet paper.",
        "In wet, aged insulation an overload can free gas bubbles well under 200 °C.",
    ),
    Caution(
        "Old oil may hold PCB.",
        "A unit made before 2 July 1979, or of unknown date, is assumed PCB-contaminated until "
        "tested (40 CFR 761.2).",
    ),
    Caution(
        "Estimates flatten peaks.",
        "Filled gaps and assumed nameplate figures carry into every result: a peak over filled "
        "readings reads low. Look at coverage and at what was assumed.",
    ),
)

_LAST_PCB_YEAR = 1979


def assumed_pcb(year_made: int | None) -> bool:
    """Tell whether a unit is assumed PCB-contaminated until tested.

    A unit of 1979 may stem from before 2 July of that year, and is.

    >>> assumed_pcb(None), assumed_pcb(1979), assumed_pcb(1980)
    (True, True, False)
    """
    return year_made is None or year_made <= _LAST_PCB_YEAR
