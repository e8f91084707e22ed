"""Green Button feeds (NAESB REQ.21, ESPI) as a table of the long layout.

A row is one interval of one UsagePoint: `meter_id`, `read_at`, a column of each quantity that the
feed holds, and `quality` in our words. What was delivered to a customer and received from them in one
interval is netted. Readings go through a table on disk, so that a feed may be of any size.
"""

from __future__ import annotations

import heapq
import re
from collections import Counter
from collections.abc import Iterator, Sequence
from itertools import groupby
from pathlib import Path
from typing import Any

import pyarrow as pa

from tracker.errors import IntakeError
from tracker.intake.espi import Channel, Entry, RawReading, channels_of, read_feed
from tracker.intake.guide import ColumnGuide, matched
from tracker.intake.interval import INTERVALS_MIN
from tracker.intake.quality import ESPI_WORDS, QualityCodes
from tracker.intake.report import KEPT_TEXT, Finding, Findings, Refusal
from tracker.intake.rows import Source
from tracker.intake.unpack import Packing, checksum_of, opened

#: Columns that may name the series: the last part of the UsagePoint's own link, which is the
#: meter unless a guide says otherwise; its title; the whole link.
NAMES = ("usage_point", "title", "href")

#: Words of ours, the one that says least good of a reading last.
WORST_LAST = ("measured", "estimated", "doubtful", "missing")

ROWS_SHOWN = 2_000


def is_xml(beginning: bytes) -> bool:
    """Say whether a file that begins so is XML."""
    plain = beginning.replace(b"\0", b"").lstrip(b"\xef\xbb\xbf\xff\xfe \t\r\n")
    return re.match(rb"<[A-Za-z_?!]", plain) is not None


class GreenButtonSource(Source):
    """A Green Button feed. Lines are those of the IntervalReading elements."""

    def __init__(
        self, path: Path, packing: Packing | None = None, guide: ColumnGuide | None = None
    ) -> None:
        super().__init__(guide)
        self.path = path
        self.name = str(path)
        self.n_bytes = path.stat().st_size
        self._spill_to_disk()
        entries = self._read(packing)
        self._channels = list(channels_of(entries))
        self._left_out = [
            f"{channel.href} ({channel.problem})" for channel in self._channels if channel.problem
        ]
        usable = [channel for channel in self._channels if not channel.problem]
        if not usable:
            found = "; ".join(dict.fromkeys(channel.problem for channel in self._channels))
            raise IntakeError(
                f"{self.name}: holds no interval readings of energy, power or current"
                f"{f' ({found})' if found else ', or is no Green Button feed'}."
            )
        quantities = list(dict.fromkeys(channel.quantity for channel in usable))
        self._take_headings(self._named([*NAMES, "read_at", *quantities, "quality"]))
        self._check_names(usable)
        self._make_table(quantities)

    def _named(self, headings: list[str]) -> list[str]:
        """Call the last part of the link the meter, unless the guide takes another name for it."""
        theirs = {
            matched(named) for ours in ("meter_id", "unit_id") for named in self.guide.named(ours)
        }
        if not theirs.intersection(map(matched, NAMES)):
            headings[0] = "meter_id"
        return headings

    def _check_names(self, channels: Sequence[Channel]) -> None:
        """Notice two UsagePoints that would become one meter."""
        place = next(
            (i for i in range(len(NAMES)) if self.headings[i] in ("meter_id", "unit_id")), 0
        )
        names = {channel.href: getattr(channel, NAMES[place]) for channel in channels}
        for name, times in Counter(names.values()).items():
            if times > 1:
                raise IntakeError(
                    f"{self.name}: {times} UsagePoints have the {NAMES[place]} {name!r}. Name another "
                    f"of {', '.join(NAMES)} for meter_id in a column guide."
                )

    # --- From the feed to a table -----------------------------------------------------------------

    def _read(self, packing: Packing | None) -> list[Entry]:
        """Read the feed; readings and blocks into tables, other entries into a list."""
        self._database.execute(
            "CREATE TABLE raw_reading (place BIGINT, line BIGINT, entry BIGINT, start VARCHAR, "
            "duration VARCHAR, value VARCHAR, quality VARCHAR)"
        )
        self._database.execute("CREATE TABLE block (entry BIGINT, up VARCHAR, own VARCHAR)")
        entries: list[Entry] = []
        blocks: list[tuple[int, str, str]] = []

        def take(entry: Entry) -> None:
            if entry.kind != "IntervalBlock":
                entries.append(entry)
                return
            own = entry.link("self").rpartition("/IntervalBlock")[0]
            blocks.append((entry.number, entry.link("up"), own))
            if len(blocks) >= ROWS_SHOWN:
                self._insert("block", blocks, ("entry", "up", "own"))
                blocks.clear()

        try:
            with opened(self.path, packing) as file:
                read_feed(self.name, file, self._insert_readings, take)
        except (OSError, EOFError) as error:
            raise self._unreadable(error) from error
        self._insert("block", blocks, ("entry", "up", "own"))
        return entries

    def _insert_readings(self, readings: list[RawReading]) -> None:
        self._insert("raw_reading", readings, RawReading._fields)

    def _insert(self, table: str, rows: Sequence[tuple[Any, ...]], names: Sequence[str]) -> None:
        if rows:
            columns = dict(zip(names, map(list, zip(*rows, strict=True)), strict=True))
            self._database.register("given", pa.table(columns))
            self._database.execute(f"INSERT INTO {table} SELECT * FROM given")  # noqa: S608 - ours
            self._database.unregister("given")

    def _make_table(self, quantities: Sequence[str]) -> None:
        """Bring the readings of each interval together in a row, in the order of the feed."""
        self._make_channels()
        self._make_qualities()
        self._database.execute(_READINGS)
        self._database.execute(_REFUSED)
        values = ", ".join(
            f"coalesce(max(raw) FILTER (quantity = '{quantity}' AND value IS NULL), "
            f"(sum(value) FILTER (quantity = '{quantity}'))::VARCHAR) AS c{len(NAMES) + 1 + place}"
            for place, quantity in enumerate(quantities)
        )
        self._database.execute(
            "CREATE TABLE row AS SELECT usage_point AS c0, any_value(title) AS c1, href AS c2, "  # noqa: S608
            f"read_at AS c{len(NAMES)}, {values}, "
            f"arg_max(word, rank) AS c{len(NAMES) + 1 + len(quantities)}, "
            "min(line) AS line, list(place ORDER BY place) AS places "
            "FROM reading GROUP BY usage_point, href, read_at, duration_s, turn ORDER BY min(place)"
        )
        self._database.execute("DROP TABLE reading")

    def _make_channels(self) -> None:
        """Write down by which links a block names its channel, and what the channel is."""
        kept = ("usage_point", "title", "href", "quantity", "sign", "per_hour", "default_quality")
        rows = [
            (
                place,
                *(getattr(channel, name) for name in kept),
                10.0 ** max(channel.power_of_ten, 0),
                10.0 ** max(-channel.power_of_ten, 0),
                channel.problem,
            )
            for place, channel in enumerate(self._channels)
        ]
        self._database.execute(
            "CREATE TABLE channel (channel BIGINT, usage_point VARCHAR, title VARCHAR, href VARCHAR, "
            "quantity VARCHAR, sign BIGINT, per_hour BOOLEAN, default_quality VARCHAR, "
            "times DOUBLE, over DOUBLE, problem VARCHAR)"
        )
        self._insert("channel", rows, ("channel", *kept, "times", "over", "problem"))
        links = {
            link: place for place, channel in enumerate(self._channels) for link in channel.blocks
        }
        self._database.execute("CREATE TABLE link (link VARCHAR, channel BIGINT)")
        self._insert("link", [each for each in links.items() if each[0]], ("link", "channel"))

    def _make_qualities(self) -> None:
        """Write down the word of ours for every code that occurs."""
        codes = self._database.execute(
            "SELECT DISTINCT quality FROM raw_reading UNION SELECT default_quality FROM channel"
        ).fetchall()
        words = QualityCodes.of(self.guide)
        own = {code.strip().casefold() for code in self.guide.quality}
        self._database.execute("CREATE TABLE quality (code VARCHAR, rank BIGINT, word VARCHAR)")
        rows = [(code, *_word(code, words, own)) for (code,) in codes]
        self._insert("quality", rows, ("code", "rank", "word"))

    # --- Rows -------------------------------------------------------------------------------------

    def _table(self) -> str:
        return "row"

    def left_out(self, used: Sequence[str]) -> list[str]:
        known = {matched(heading) for heading in (*used, *NAMES)}
        return [
            *(heading for heading in self.headings if matched(heading) not in known),
            *self._left_out,
        ]

    def refusals(self, findings: Findings) -> Iterator[Refusal]:
        return heapq.merge(
            self._refused_before(), self._refused_rows(findings), key=lambda each: each.line
        )

    def _refused_before(self) -> Iterator[Refusal]:
        """Yield the readings that did not become rows."""
        found = self._database.cursor().execute(
            f"SELECT line, code, reason, {_SHOWN} FROM refused JOIN raw_reading USING (place, line) "  # noqa: S608
            "ORDER BY place"
        )
        while some := found.fetchmany(ROWS_SHOWN):
            for line, code, reason, shown in some:
                yield Refusal(self.name, line, "", code, reason, shown[:KEPT_TEXT])

    def _refused_rows(self, findings: Findings) -> Iterator[Refusal]:
        held: list[tuple[int, list[Finding]]] = []
        for ordinal, of_row in groupby(findings.in_order(), key=lambda each: each.ordinal):
            held.append((ordinal, list(of_row)))
            if len(held) == ROWS_SHOWN:
                yield from self._shown(held)
                held = []
        yield from self._shown(held)

    def _shown(self, held: Sequence[tuple[int, list[Finding]]]) -> Iterator[Refusal]:
        if not held:
            return
        wanted = ", ".join(str(ordinal) for ordinal, _ in held)
        rows = (
            self._database.cursor()
            .execute(
                f"SELECT any_value(of.line), string_agg({_SHOWN}, '; ' ORDER BY place) FROM "  # noqa: S608
                f"(SELECT rowid AS ordinal, line, unnest(places) AS place FROM row "
                f"WHERE rowid IN ({wanted})) AS of JOIN raw_reading USING (place) "
                "GROUP BY ordinal ORDER BY ordinal"
            )
            .fetchall()
        )
        for (_, findings), (line, shown) in zip(held, rows, strict=True):
            for each in findings:
                yield Refusal(
                    self.name, line, each.column, each.code, each.reason, shown[:KEPT_TEXT]
                )

    def fingerprint(self) -> str:
        return checksum_of(self.path)


def _word(codes: str, words: QualityCodes, own: set[str]) -> tuple[int, str]:
    """Return rank and word of the worst of some codes; an unknown one is shown as it is."""
    worst = (-1, "")
    for code in codes.split():
        known = ESPI_WORDS.get(int(code)) if code.isdecimal() and len(code) < 4 else None
        if code.casefold() in own:
            known = _our_word(code, words)
        rank = WORST_LAST.index(known) if known else len(WORST_LAST)
        worst = max(worst, (rank, known or f"ESPI {code[:40]}"))
    return worst


def _our_word(code: str, words: QualityCodes) -> str | None:
    meaning = words.meaning(code)
    return next((word for word in WORST_LAST if words.meaning(word) == meaning), None)


#: A reading as it stands in the feed.
_SHOWN = (
    "concat_ws(', ', 'start ' || start, 'duration ' || duration, 'value ' || raw_reading.value, "
    "nullif('quality ' || raw_reading.quality, 'quality '))"
)
_LENGTHS_S = ", ".join(str(60 * minutes) for minutes in INTERVALS_MIN)

#: Readings with what their channel says of them. `turn` tells readings apart that the feed holds
#: twice: they are two rows, and not to be added up.
_READINGS = f"""
CREATE TABLE reading AS
SELECT place, line, usage_point, title, href, quantity, problem, per_hour, duration_s, raw, word, rank,
    CASE WHEN start_s IS NULL THEN start
         ELSE strftime(make_timestamp(start_s * 1000000), '%Y-%m-%dT%H:%M:%SZ') END AS read_at,
    CASE WHEN isfinite(number)
         THEN number * CASE WHEN per_hour THEN 3600.0 / duration_s ELSE 1.0 END END AS value,
    duration_s IS NULL OR duration_s IN ({_LENGTHS_S}) AS is_interval,
    row_number() OVER (
        PARTITION BY href, quantity, sign, start, duration_s ORDER BY place) AS turn
FROM (
    SELECT place, line, channel.*, start, duration, raw_reading.value AS raw, quality.word, quality.rank,
        CASE WHEN regexp_full_match(start, '-?\\d{{1,11}}') THEN start::BIGINT END AS start_s,
        CASE WHEN regexp_full_match(duration, '\\d{{1,9}}') THEN duration::BIGINT END AS duration_s,
        TRY_CAST(raw_reading.value AS DOUBLE) * sign * times / over AS number
    FROM raw_reading
    LEFT JOIN block ON block.entry = raw_reading.entry
    LEFT JOIN link AS by_up ON by_up.link = block.up
    LEFT JOIN link AS by_own ON by_own.link = block.own
    LEFT JOIN channel ON channel.channel = coalesce(by_up.channel, by_own.channel)
    LEFT JOIN quality
        ON quality.code = coalesce(nullif(raw_reading.quality, ''), channel.default_quality, '')
)
"""  # noqa: S608 - our own figures

_REFUSED = """
CREATE TABLE refused AS
SELECT place, line,
    CASE WHEN href IS NULL THEN 'reading.no_meter' ELSE 'interval.length' END AS code,
    CASE WHEN href IS NULL THEN 'the feed has no MeterReading that this block belongs to'
         WHEN duration_s IS NULL
         THEN 'the reading does not say the length of its interval, which turns VAh into kVA'
         ELSE 'the interval is of ' || duration_s || ' s; allowed: 5, 10, 15, 20, 30 or 60 minutes'
         END AS reason
FROM reading
WHERE href IS NULL OR (problem = '' AND (NOT is_interval OR (per_hour AND duration_s IS NULL)));
DELETE FROM reading
WHERE href IS NULL OR problem != '' OR NOT is_interval OR (per_hour AND duration_s IS NULL)
"""
