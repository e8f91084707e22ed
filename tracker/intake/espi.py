"""Reading the XML of a Green Button feed: NAESB REQ.21 (ESPI) entries in an Atom feed.

What is said here of the schema (names of elements, codes, how entries are linked) is from memory of
the published ESPI schema. An Atom entry holds one UsagePoint, MeterReading, ReadingType or
IntervalBlock; entries name one another by their links: a block's `up` is the collection that a
MeterReading names as `related`, which names its ReadingType in the same way, and lies `up` in
its UsagePoint.

The parser is the standard library's: it names every line, keeps nothing of what it has passed, and
fetches nothing. Entities that a file declares are refused.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from typing import BinaryIO, NamedTuple
from xml.parsers import expat

from tracker.errors import IntakeError

BLOCK_BYTES = 1 << 18
READINGS_A_BATCH = 50_000
DEEPEST_ELEMENT = 100
LONGEST_TEXT = 200
MOST_NAMES = 10_000

KINDS = frozenset({"UsagePoint", "MeterReading", "ReadingType", "IntervalBlock"})

#: Elements of a ReadingType that say what its readings are.
TYPE_ELEMENTS = frozenset(
    {"uom", "powerOfTenMultiplier", "flowDirection", "accumulationBehaviour", "defaultQuality"}
)
#: Elements of an IntervalReading, and the element each stands in.
READING_ELEMENTS = {
    "duration": "timePeriod",
    "start": "timePeriod",
    "value": "IntervalReading",
    "quality": "ReadingQuality",
}
_TEXTS = TYPE_ELEMENTS | set(READING_ELEMENTS) | {"title"}
_BEGINNINGS = KINDS | {"entry", "link", "IntervalReading"}


@dataclass(slots=True)
class Entry:
    """An Atom entry without its readings."""

    number: int
    line: int
    kind: str = ""
    title: str = ""
    links: dict[str, list[str]] = field(default_factory=dict)  #: by relation
    facts: dict[str, str] = field(default_factory=dict)  #: of a ReadingType, by element

    def link(self, relation: str) -> str:
        """Return the first link of a relation; blank if there is none."""
        return next(iter(self.links.get(relation, ())), "")


class RawReading(NamedTuple):
    """An IntervalReading as it stands."""

    place: int  #: in the feed, from 1
    line: int
    entry: int  #: number of the entry it stands in
    start: str  #: [s since 1970, UTC]
    duration: str  #: [s]
    value: str
    quality: str  #: codes, separated by spaces


def read_feed(
    name: str,
    file: BinaryIO,
    on_readings: Callable[[list[RawReading]], None],
    on_entry: Callable[[Entry], None],
) -> None:
    """Read a feed from end to end, handing over readings and entries as they are complete.

    Raises
    ------
    IntakeError
        If it is no valid XML; the message names the line.
    OSError
        If the file cannot be read.
    """
    feed = _Feed(name, on_readings, on_entry)
    try:
        while block := file.read(BLOCK_BYTES):
            feed.parser.Parse(block, False)
        feed.parser.Parse(b"", True)
    except expat.ExpatError as error:
        raise IntakeError(
            f"{name}: is not valid XML: {expat.ErrorString(error.code)} (line {error.lineno}). "
            "Nothing of it was kept; send the file anew."
        ) from None
    except (LookupError, ValueError) as error:  # an encoding that Python does not know
        raise IntakeError(f"{name}: is not valid XML: {error}.") from None
    feed.flush()


class _Feed:
    """The handlers of the parser, and where in the feed it is."""

    def __init__(
        self,
        name: str,
        on_readings: Callable[[list[RawReading]], None],
        on_entry: Callable[[Entry], None],
    ) -> None:
        self._name = name
        self._on_readings = on_readings
        self._on_entry = on_entry
        self._names: dict[str, str] = {}
        self._within: list[str] = []
        self._entry: Entry | None = None
        self._n_entry = self._n_reading = 0
        self._reading: dict[str, str] | None = None
        self._line = 0
        self._text: list[str] | None = None
        self._held: list[RawReading] = []
        self._take_text = self._characters
        self.parser = expat.ParserCreate(namespace_separator=" ")
        self.parser.buffer_text = True
        self.parser.StartElementHandler = self._start
        self.parser.EndElementHandler = self._end
        self.parser.EntityDeclHandler = self._entity

    def flush(self) -> None:
        """Hand over the readings that are held."""
        if self._held:
            self._on_readings(self._held)
            self._held = []

    def _start(self, tag: str, attributes: dict[str, str]) -> None:
        name = self._names.get(tag)
        if name is None:
            name = tag.rpartition(" ")[2]
            if len(self._names) < MOST_NAMES:
                self._names[tag] = name
        if name in _TEXTS:
            self._text = []
            self.parser.CharacterDataHandler = self._take_text
        else:
            self._text = None
            if name in _BEGINNINGS:
                self._begin(name, attributes)
        self._within.append(name)
        if len(self._within) > DEEPEST_ELEMENT:
            raise IntakeError(
                f"{self._name}: line {self.parser.CurrentLineNumber}: elements stand more than "
                f"{DEEPEST_ELEMENT} deep in one another, so this is no Green Button feed."
            )

    def _begin(self, name: str, attributes: dict[str, str]) -> None:
        parent = self._within[-1] if self._within else ""
        if name == "IntervalReading":
            self._reading = {}
            self._line = self.parser.CurrentLineNumber
        elif name == "entry":
            self._n_entry += 1
            self._entry = Entry(self._n_entry, self.parser.CurrentLineNumber)
        elif self._entry is None:
            return
        elif name == "link":
            if parent == "entry":
                links = self._entry.links.setdefault(attributes.get("rel", ""), [])
                links.append(_plain(attributes.get("href", "")))
        elif parent == "content":
            self._entry.kind = name

    def _characters(self, text: str) -> None:
        if self._text is not None and len(self._text) < LONGEST_TEXT:
            self._text.append(text[:LONGEST_TEXT])

    def _end(self, _: str) -> None:
        name = self._within.pop()
        if self._text is not None:
            self._take(name, " ".join("".join(self._text).split())[:LONGEST_TEXT])
            self._text = None
            self.parser.CharacterDataHandler = None
        elif name == "IntervalReading":
            self._end_of_reading()
        elif name == "entry" and self._entry is not None:
            self._on_entry(self._entry)
            self._entry = None

    def _end_of_reading(self) -> None:
        found = self._reading if self._reading is not None else {}
        self._reading = None
        self._n_reading += 1
        entry = self._entry.number if self._entry is not None else 0
        texts = (found.get(name, "") for name in ("start", "duration", "value", "quality"))
        self._held.append(RawReading(self._n_reading, self._line, entry, *texts))
        if len(self._held) >= READINGS_A_BATCH:
            self.flush()

    def _take(self, name: str, text: str) -> None:
        """Take the text of an element, where it is one that counts."""
        parent = self._within[-1] if self._within else ""
        if self._reading is not None:
            if READING_ELEMENTS.get(name) == parent:
                earlier = self._reading.get(name, "")
                both = f"{earlier} {text}" if earlier and name == "quality" else text
                self._reading[name] = both
        elif self._entry is not None:
            if parent == "ReadingType" and name in TYPE_ELEMENTS:
                self._entry.facts[name] = text
            elif parent == "entry" and name == "title":
                self._entry.title = text

    def _entity(self, *_: object) -> None:
        raise IntakeError(
            f"{self._name}: line {self.parser.CurrentLineNumber}: declares entities of its own, which "
            "no Green Button feed needs. Nothing of it was kept."
        )


def _plain(href: str) -> str:
    """Return a link without what may be written in several ways."""
    return href.strip().partition("?")[0].rstrip("/")


# --- What readings are ----------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Unit:
    """A unit of measure of ESPI, and what it becomes."""

    quantity: str  #: heading of ours
    thousand: bool = True  #: ours is the kilo of it
    per_hour: bool = False  #: divided by the length of the interval


#: Codes of `uom`.
UNITS = {
    5: Unit("amps_lv", thousand=False),  # A
    38: Unit("kw"),  # W
    61: Unit("kva"),  # VA
    63: Unit("kvar"),  # var
    71: Unit("kva", per_hour=True),  # VAh
    72: Unit("kwh"),  # Wh
    73: Unit("kvarh"),  # varh
}

#: Codes of `flowDirection` that are understood, and the sign of each: none, forward (delivered to the
#: customer), net; reverse (received from the customer).
DIRECTIONS = {0: 1, 1: 1, 4: 1, 19: -1}

#: Codes of `accumulationBehaviour` that are values of the interval itself: none, delta data,
#: indicating, summation, instantaneous. Others are registers that only count up.
OF_THE_INTERVAL = frozenset({0, 4, 6, 9, 12})


@dataclass(frozen=True, slots=True)
class Channel:
    """A MeterReading: what its readings are, and of which UsagePoint."""

    usage_point: str
    title: str
    href: str
    quantity: str
    sign: int
    power_of_ten: int  #: from the value in the file to the unit of the quantity
    per_hour: bool
    default_quality: str
    blocks: tuple[str, ...]  #: links by which its blocks name it
    problem: str = ""  #: why its readings cannot be taken


def channels_of(entries: list[Entry]) -> Iterator[Channel]:
    """Follow the links of a feed from each MeterReading to its UsagePoint and ReadingType."""
    points = {
        link: entry for entry in entries if entry.kind == "UsagePoint" for link in _reach(entry)
    }
    types = {entry.link("self"): entry for entry in entries if entry.kind == "ReadingType"}
    for entry in entries:
        if entry.kind != "MeterReading":
            continue
        own = entry.link("self")
        point = points.get(entry.link("up")) or points.get(own.rpartition("/MeterReading")[0])
        href = point.link("self") if point else own.rpartition("/MeterReading")[0] or own
        related = entry.links.get("related", [])
        kind = next((types[link] for link in related if link in types), None)
        unit, sign, power, problem = _meaning(kind)
        yield Channel(
            href.rpartition("/")[2],
            point.title if point else "",
            href,
            unit.quantity,
            sign,
            power,
            unit.per_hour,
            kind.facts.get("defaultQuality", "") if kind else "",
            tuple(dict.fromkeys([own, f"{own}/IntervalBlock", *related])),
            problem,
        )


def _reach(point: Entry) -> Iterator[str]:
    """Yield the links by which a MeterReading may name its UsagePoint."""
    own = point.link("self")
    yield from (own, f"{own}/MeterReading", *point.links.get("related", ()))


def _meaning(kind: Entry | None) -> tuple[Unit, int, int, str]:
    """Return unit, sign, power of ten and what is wrong with a ReadingType."""
    nothing = Unit("")
    if kind is None:
        return nothing, 1, 0, "the feed has no ReadingType that says what the reading is"
    facts = {name: _whole(kind.facts.get(name, "")) for name in TYPE_ELEMENTS}
    unit = UNITS.get(facts["uom"] if facts["uom"] is not None else -1)
    sign = DIRECTIONS.get(facts["flowDirection"] or 0)
    power = facts["powerOfTenMultiplier"] or 0
    behaviour = facts["accumulationBehaviour"] or 0
    if unit is None:
        return nothing, 1, 0, f"unit of measure {kind.facts.get('uom', '')!r} is no load"
    if sign is None:
        return unit, 1, 0, f"flow direction {kind.facts['flowDirection']} is neither of the two"
    if behaviour not in OF_THE_INTERVAL:
        return unit, 1, 0, f"accumulation behaviour {behaviour} is a register that counts up"
    if abs(power) > 30:
        return unit, 1, 0, f"power of ten {power} is out of range"
    return unit, sign, power - 3 * unit.thousand, ""


def _whole(text: str) -> int | None:
    try:
        return int(text)
    except ValueError:
        return None
