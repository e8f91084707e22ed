"""Drafting a column guide from the headings and first rows of a file, for a person to edit."""

from __future__ import annotations

import csv
import datetime as dt
import itertools
import re
from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import tomlkit
from tomlkit.items import Table

from tracker.errors import IntakeError
from tracker.intake.csv_source import BYTE_ORDER_MARKS, LONGEST_HEADING_LINE
from tracker.intake.csv_tidy import UNREADABLE, text_of
from tracker.intake.days import DAY_COLUMNS, INTERVAL_HEADING
from tracker.intake.guide import HEADINGS, SEPARATORS, UNITS, guide_from, matched, unit_named
from tracker.intake.guide_words import (
    AT_END,
    HEADING_WORDS,
    QUALITY_WORDS,
    RECEIVED,
    bare,
    heading_and_unit,
)
from tracker.intake.quality import WORDS
from tracker.intake.rows import Source
from tracker.intake.source import checked_path, open_source
from tracker.intake.table_source import TableSource
from tracker.intake.unpack import opened, packing_of

#: Rows and columns that are looked at.
SAMPLE_ROWS = 5_000
SHOWN_COLUMNS = 40
SAMPLE_BYTES = 4_000_000

#: Most lines before the headings that are looked through.
MOST_BEFORE = 60

#: Share of cells that must agree: a few damaged rows are no reason to give up.
MOST = 0.9

#: Ways of writing times that are tried on all cells of a column.
MOST_PATTERNS = 12

#: Different quality codes from which on a column is taken to hold something else.
MOST_CODES = 40


@dataclass(slots=True)
class Sample:
    """What is seen of a file: headings and first rows, as text."""

    name: str
    headings: list[str]
    rows: list[list[str]]
    separator: str | None = None
    encoding: str | None = None
    skip_lines: int = 0

    def column(self, place: int) -> list[str]:
        """Return the cells of a column that are not blank."""
        return [row[place].strip() for row in self.rows if place < len(row) and row[place].strip()]


@dataclass(slots=True)
class Draft:
    """What was recognised, and what is unsure."""

    columns: dict[str, int] = field(default_factory=dict)  #: our heading: place of theirs
    units: dict[str, str] = field(default_factory=dict)
    decimal: str = "."
    thousands: str | None = None
    stamp_format: str | None = None
    date_format: str | None = None
    stamps_at_end: bool = False
    interval_columns: list[str] = field(default_factory=list)
    quality: dict[str, str | None] = field(default_factory=dict)
    is_local: bool = False
    unsure: dict[str, str] = field(default_factory=dict)  #: by key: what a person should look at
    left_out: list[int] = field(default_factory=list)
    remarks: list[str] = field(default_factory=list)


def draft_guide(path: Path | str) -> str:
    """Draft a column guide from a file's headings and first rows.

    Returns
    -------
    text : str
        TOML with comments that say what is unsure; a valid guide as it stands.

    Raises
    ------
    InputError
        If the file is not there, or has no headings that can be read.
    """
    path = checked_path(path)
    sample = _sampled(path)
    if not isinstance(sample, Sample):
        return _of_a_feed(path, sample)
    draft = Draft()
    _find_number_form(sample, draft)
    _find_columns(sample, draft)
    _find_times(sample, draft)
    _find_intervals(sample, draft)
    _find_quality(sample, draft)
    text = _written(sample, draft)
    guide_from(text, f"the draft for {path}")
    return text


# --- A look at the file ---------------------------------------------------------------------------


def _sampled(path: Path) -> Sample | Source:
    """Return the beginning of a table, or the source of a file whose columns are known."""
    try:
        packing = packing_of(path)
        with opened(path, packing) as file:
            beginning = file.read(SAMPLE_BYTES)
    except (OSError, EOFError, ValueError) as error:
        raise IntakeError(f"{path}: cannot be read ({error}). Send the file anew.") from error
    if beginning[:4] == b"PAR1" or beginning.lstrip(b"\xef\xbb\xbf \t\r\n")[:1] == b"<":
        source = open_source(path)
        return _of_table(source) if isinstance(source, TableSource) else source
    encoding = _guessed_encoding(beginning)
    with opened(path, packing) as file, text_of(file, encoding or "utf-8-sig") as text:
        lines: list[str] = []
        size = 0
        while size < SAMPLE_BYTES and len(lines) < SAMPLE_ROWS + MOST_BEFORE:
            try:
                line = text.readline(LONGEST_HEADING_LINE)
            except (OSError, EOFError):
                break  # a packed file that ends early still has headings to look at
            if not line:
                break
            lines.append(line.rstrip("\n").replace("\0", ""))
            size += len(line)
    if encoding in ("utf-16", "utf-32"):
        encoding = None  # told by its first bytes
    return _of_lines(str(path), lines, encoding)


def _guessed_encoding(beginning: bytes) -> str | None:
    for mark, encoding in BYTE_ORDER_MARKS.items():
        if beginning.startswith(mark):
            return encoding
    try:
        beginning[: -4 if len(beginning) == SAMPLE_BYTES else None].decode("utf-8")
    except UnicodeDecodeError as error:
        # A few stray bytes far down are damage, and not another encoding.
        return "windows-1252" if beginning[error.start] >= 0xA0 else None
    return None


def _of_table(source: TableSource) -> Sample:
    select = {f"t{place}": source.cell_at(place) for place in range(len(source.headings))}
    rows: list[list[str]] = []
    for batch in source.batches(select, SAMPLE_ROWS):
        rows += [[value or "" for value in row.values()] for row in batch.to_pylist()]
        if len(rows) >= SAMPLE_ROWS:
            break
    return Sample(source.name, list(source.headings), rows[:SAMPLE_ROWS])


def _of_lines(name: str, lines: list[str], encoding: str | None) -> Sample:
    filled = [number for number, line in enumerate(lines) if line.strip()]
    if not filled:
        raise IntakeError(f"{name}: is empty. A CSV file begins with one line of headings.")
    separator, width = _separator_of([lines[number] for number in filled[:MOST_BEFORE]])
    first = next(
        (n for n in filled[:MOST_BEFORE] if _n_field(lines[n], separator) >= width), filled[0]
    )
    records = _records(lines[first:], separator)
    headings = [" ".join(cell.split()) for cell in next(records, [])]
    if any(UNREADABLE in heading for heading in headings):
        raise IntakeError(f"{name}: line {first + 1} is no text in any encoding that is known.")
    rows = list(itertools.islice((row for row in records if row), SAMPLE_ROWS))
    return Sample(
        name,
        headings,
        rows,
        separator,
        encoding,
        first if any(map(str.strip, lines[:first])) else 0,
    )


def _records(lines: Iterable[str], separator: str) -> Iterator[list[str]]:
    reader = csv.reader((line + "\n" for line in lines), delimiter=separator)
    while True:
        try:
            row = next(reader)
        except StopIteration:
            return
        except csv.Error:
            continue
        yield row


def _n_field(line: str, separator: str) -> int:
    return len(next(_records([line], separator), []))


def _separator_of(lines: Sequence[str]) -> tuple[str, int]:
    """Return the sign that splits most lines alike, and into how many fields."""
    best: tuple[int, int, str] = (0, 1, ",")
    for separator in SEPARATORS:
        width, times = Counter(_n_field(line, separator) for line in lines).most_common(1)[0]
        if width > 1:
            best = max(best, (times * min(width, 50), width, separator))
    return best[2], best[1]


# --- Numbers --------------------------------------------------------------------------------------

_PLAIN = re.compile(r"[+-]?\d*\.?\d+(e[+-]?\d+)?", re.IGNORECASE)
_COMMA = re.compile(r"[+-]?\d+,\d+")
_GROUPED = re.compile(r"[+-]?\d{1,3}(?:([.,' ])\d{3})+(?:([.,])\d+)?")


def _find_number_form(sample: Sample, draft: Draft) -> None:
    """Find the decimal sign, and what stands between thousands."""
    comma = point = 0
    marks: Counter[str] = Counter()
    for row in sample.rows[:1000]:
        for cell in map(str.strip, row):
            grouped = _GROUPED.fullmatch(cell)
            if grouped and grouped[2] and grouped[2] != grouped[1]:
                marks[grouped[1]] += 1
                comma += grouped[2] == ","
                point += grouped[2] == "."
            elif _COMMA.fullmatch(cell):
                comma += 1
            elif "." in cell and _PLAIN.fullmatch(cell):
                point += 1
    if comma > point:
        draft.decimal = ","
        if point:
            draft.unsure["decimal"] = f"{point:,} cells of the first rows have a decimal point"
    marks.pop(draft.decimal, None)
    if marks:
        draft.thousands = marks.most_common(1)[0][0]


def _is_number(cell: str, draft: Draft) -> bool:
    if draft.thousands:
        cell = cell.replace(draft.thousands, "")
    return _PLAIN.fullmatch(cell.replace(draft.decimal, ".")) is not None


def _are_numbers(cells: Sequence[str], draft: Draft) -> bool:
    return bool(cells) and sum(_is_number(cell, draft) for cell in cells) >= MOST * len(cells)


# --- Columns --------------------------------------------------------------------------------------

#: Headings of ours to look for, by the kind of file; the surest come first.
_LOADS = (
    *("meter_id", "unit_id", "read_at", "date", "quality"),
    *("kwh", "kvarh", "kw", "kva", "kvar", "amps_lv", "amps_hv"),
)
_WEATHER = ("station_id", "read_at", "air_temp_c", "air_temp_f", "quality")
_CONNECTIONS = HEADINGS["connections"]
_UNITS = HEADINGS["units"]
_OTHERS = tuple(dict.fromkeys([*HEADINGS["monthly"], *HEADINGS["unmetered"], *_UNITS]))

#: Headings that only a register of units has.
_OF_UNITS = frozenset(_UNITS) - {"unit_id", "site_id", "customers", "weather_station"}

_VALUES = frozenset(_LOADS[5:]) | {"air_temp_c", "air_temp_f", "rated_kva"}


def _find_columns(sample: Sample, draft: Draft) -> None:
    for ours in _wanted(sample):
        place = _place_of(sample, draft, ours)
        if place is not None:
            draft.columns[ours] = place
    if {"read_at", "date"} <= set(draft.columns):
        day, clock = draft.columns["date"], draft.columns["read_at"]
        if not _are_times(sample.column(clock)):
            del draft.columns["read_at"]
            if _VALUES & set(draft.columns):
                draft.remarks.append(
                    f"The time of a reading stands in two columns, {sample.headings[day]!r} and "
                    f"{sample.headings[clock]!r}: bring them together in one before taking it in."
                )
        elif _VALUES & set(draft.columns):
            del draft.columns["date"]
    for ours, place in draft.columns.items():
        _find_unit(sample, draft, ours, place)
    taken = set(draft.columns.values())
    draft.left_out = [place for place in range(len(sample.headings)) if place not in taken]
    for place in draft.left_out:
        if RECEIVED.search(sample.headings[place]):
            draft.remarks.append(
                f"{sample.headings[place]!r} seems to be energy received from customers. Energy that "
                "is exported is a negative reading; a column of its own is not taken in."
            )


def _wanted(sample: Sample) -> Sequence[str]:
    """Return the headings of ours to look for, by the kind of file this seems to be."""
    words = {bare(heading_and_unit(heading)[0]) for heading in sample.headings}
    words |= set(map(bare, sample.headings))

    def named(*ours: str) -> set[str]:
        return {each for each in ours if words & {bare(each), *HEADING_WORDS.get(each, ())}}

    n_shown = min(SHOWN_COLUMNS, len(sample.headings))
    timed = bool(named("read_at")) or any(_are_times(sample.column(at)) for at in range(n_shown))
    if "unit_id" in named("unit_id") and len(named(*_OF_UNITS)) >= 2:
        return _UNITS
    of_connections = named("starts_on", "multiplier", "class") or not timed
    if of_connections and named("meter_id") and named("unit_id", "site_id"):
        return _CONNECTIONS
    if not timed:
        return _OTHERS
    temperature = named("air_temp_c", "air_temp_f")
    return _WEATHER if temperature and not named("meter_id", "kw", "kva") else _LOADS


def _place_of(sample: Sample, draft: Draft, ours: str) -> int | None:
    """Return the place of the heading that seems to be one of ours; the surest word wins."""
    taken = set(draft.columns.values())
    headings = sample.headings
    for place, heading in enumerate(headings):
        if matched(heading) == matched(ours) and place not in taken:
            return place
    for word in (bare(ours), *HEADING_WORDS.get(ours, ())):
        for place, heading in enumerate(headings):
            if place in taken or RECEIVED.search(heading):
                continue
            plain, unit = heading_and_unit(heading)
            if word in (bare(heading), bare(plain)) and _may_be(ours, unit, sample, place, draft):
                return place
    return None


def _may_be(ours: str, unit: str | None, sample: Sample, place: int, draft: Draft) -> bool:
    """Say whether unit and cells agree with a heading of ours."""
    if unit is not None and ours in UNITS and unit_named(ours, unit) is None:
        return False
    if ours == "air_temp_f" and unit not in (None, "F", "°F"):
        return False
    cells = sample.column(place)[:200]
    return ours not in _VALUES or not cells or _are_numbers(cells, draft)


def _find_unit(sample: Sample, draft: Draft, ours: str, place: int) -> None:
    if ours not in UNITS:
        return
    heading = sample.headings[place]
    unit = heading_and_unit(heading)[1]
    whole = bare(heading)
    named = unit_named(ours, unit) if unit else None
    if named is None:
        named = next((each for each in UNITS[ours] if whole == each.casefold()), None)
    if named is not None:
        if UNITS[ours][named] != "{}":
            draft.units[ours] = named
    elif ours == "air_temp_c" and unit is None and whole[-1:] != "c":
        draft.unsure[ours] = "the heading does not say whether degrees are °C or °F"
        numbers = [_value(cell, draft) for cell in sample.column(place)[:2000]]
        if numbers and max(numbers) > 55:
            draft.units[ours] = "°F"
    elif ours in ("kwh", "kw") and ours not in whole and unit is None:
        unit_assumed = "kWh" if ours == "kwh" else "kW"
        draft.unsure[ours] = f"the heading does not say its unit; {unit_assumed} is assumed"


def _value(cell: str, draft: Draft) -> float:
    try:
        return float(cell.replace(draft.thousands or "\0", "").replace(draft.decimal, "."))
    except ValueError:
        return 0.0


# --- Times ----------------------------------------------------------------------------------------

#: How dates begin, and the patterns that each may mean; {0} is the sign between its parts.
_DATES = [
    (re.compile(r"\d{1,2}([-/.])\d{1,2}\1\d{4}"), ("%m{0}%d{0}%Y", "%d{0}%m{0}%Y")),
    (re.compile(r"\d{1,2}([-/.])\d{1,2}\1\d{2}(?!\d)"), ("%m{0}%d{0}%y", "%d{0}%m{0}%y")),
    (re.compile(r"\d{4}([-/.])\d{1,2}\1\d{1,2}"), ("%Y{0}%m{0}%d",)),
    (re.compile(r"\d{1,2}([-/ ]?)[A-Za-z]{3}\1\d{4}"), ("%d{0}%b{0}%Y",)),
    (re.compile(r"\d{1,2}([-/ ]?)[A-Za-z]{3}\1\d{2}(?!\d)"), ("%d{0}%b{0}%y",)),
    (re.compile(r"\d{1,2}( )[A-Za-z]{4,9} \d{4}"), ("%d %B %Y",)),
    (re.compile(r"[A-Za-z]{3,9}( )\d{1,2} \d{4}"), ("%b %d %Y", "%B %d %Y")),
    (re.compile(r"[A-Za-z]{3,9}( )\d{1,2}, \d{4}"), ("%b %d, %Y", "%B %d, %Y")),
    (re.compile(r"\d{4}()\d{2}\d{2}"), ("%Y%m%d",)),
]
_CLOCKS = {
    "%H:%M": r"\d{1,2}:\d{2}",
    "%H:%M:%S": r"\d{1,2}:\d{2}:\d{2}",
    "%H:%M:%S.%f": r"\d{1,2}:\d{2}:\d{2}\.\d{1,6}",
    "%I:%M %p": r"\d{1,2}:\d{2} [AaPp][Mm]",
    "%I:%M%p": r"\d{1,2}:\d{2}[AaPp][Mm]",
    "%I:%M:%S %p": r"\d{1,2}:\d{2}:\d{2} [AaPp][Mm]",
    "%I:%M:%S%p": r"\d{1,2}:\d{2}:\d{2}[AaPp][Mm]",
    "%H.%M": r"\d{1,2}\.\d{2}",
    "%H%M": r"\d{4}",
    "%H%M%S": r"\d{6}",
}
#: What stands behind a date: a sign, a time of day, and an offset from UTC.
_BEHIND = {
    pattern: re.compile(rf"( - |, | |T|:|){clock}(?:( ?)(?:Z|[+-]\d\d:?\d\d))?")
    for pattern, clock in _CLOCKS.items()
}
_DATE_HEADINGS = ("date", "installed_on", "removed_on", "starts_on", "ends_on")
_END_OF_DAY = re.compile(r"\b24:00")


def _are_times(cells: Sequence[str]) -> bool:
    """Say whether cells hold dates, with or without a time of day."""
    some = [cell for cell in cells[:50] if not _END_OF_DAY.search(cell)]
    if not some:
        return False
    if all(cell.isdecimal() for cell in some):  # eight digits are a date only where they read so
        return all(len(cell) in (8, 12, 14) for cell in some) and bool(_patterns(some))
    return _are_iso(some) or bool(_patterns(some))


def _are_iso(cells: Sequence[str]) -> bool:
    return sum(_iso(cell) is not None for cell in cells) >= MOST * len(cells)


def _iso(cell: str) -> dt.datetime | None:
    try:
        return dt.datetime.fromisoformat(cell)
    except ValueError:
        return None


def _patterns(cells: Sequence[str]) -> list[str]:
    """Return the patterns by which most cells can be read, and none more than by another."""
    candidates = dict.fromkeys(pattern for cell in cells[:20] for pattern in _patterns_of(cell))
    times = {
        pattern: sum(_read(cell, pattern) is not None for cell in cells)
        for pattern in itertools.islice(candidates, MOST_PATTERNS)
    }
    most = max(times.values(), default=0)
    return [pattern for pattern, n in times.items() if n == most and n >= MOST * len(cells)]


def _patterns_of(cell: str) -> Iterator[str]:
    for form, patterns in _DATES:
        found = form.match(cell)
        if found is None:
            continue
        behind = cell[found.end() :]
        ends = [""] if not behind else list(_clocks_of(behind))
        for pattern, end in itertools.product(patterns, ends):
            yield pattern.format(found[1]) + end


def _clocks_of(text: str) -> Iterator[str]:
    for clock, form in _BEHIND.items():
        found = form.fullmatch(text)
        if found is not None:
            yield found[1] + clock + (f"{found[2]}%z" if found[2] is not None else "")


def _read(cell: str, pattern: str) -> dt.datetime | None:
    try:
        read = dt.datetime.strptime(cell, pattern)
    except ValueError:
        return None
    return read if 1970 <= read.year <= 2100 else None


def _find_times(sample: Sample, draft: Draft) -> None:
    """Find how stamps and dates are written."""
    for ours in ("read_at", "date"):
        if ours in draft.columns:
            cells = sample.column(draft.columns[ours])
            draft.is_local = not any(re.search(r"(Z|[+-]\d\d:?\d\d)$", cell) for cell in cells[:5])
    if "read_at" in draft.columns:
        place = draft.columns["read_at"]
        draft.stamps_at_end = AT_END.search(sample.headings[place]) is not None
        draft.stamp_format = _pattern_of(sample.column(place), "stamp_format", draft)
    dates = [
        cell
        for ours in _DATE_HEADINGS
        if ours in draft.columns
        for cell in sample.column(draft.columns[ours])
    ]
    draft.date_format = _pattern_of(dates, "date_format", draft)


def _pattern_of(cells: Iterable[str], key: str, draft: Draft) -> str | None:
    """Return the pattern of some stamps or dates; None where they are ISO 8601 or not recognised."""
    distinct = list(dict.fromkeys(cells))
    if any(_END_OF_DAY.search(cell) for cell in distinct):
        draft.stamps_at_end = True
        distinct = [cell for cell in distinct if not _END_OF_DAY.search(cell)]
    if not distinct or _are_iso(distinct):
        return None
    pattern, doubt = _chosen(distinct, _patterns(distinct))
    if doubt:
        draft.unsure[key] = doubt
    return pattern


def _chosen(cells: Sequence[str], found: Sequence[str]) -> tuple[str | None, str]:
    """Return the likeliest pattern, and what is unsure about it."""
    if not found:
        shown = ", ".join(map(repr, cells[:2]))
        return None, f"how {shown} are written was not recognised"
    day_first = [pattern for pattern in found if pattern.startswith("%d")]
    month_first = [pattern for pattern in found if pattern.startswith("%m")]
    if not (day_first and month_first):
        return found[0], ""
    spans = {pattern: _span(cells, pattern) for pattern in (month_first[0], day_first[0])}
    best = min(spans, key=lambda pattern: spans[pattern])
    order = "month" if best.startswith("%m") else "day"
    if len(set(spans.values())) == 1:
        return (
            best,
            "month first or day first cannot be told from the first rows; month first is assumed",
        )
    return best, f"{order} first is likelier, because the rows then lie closer together; check it"


def _span(cells: Sequence[str], pattern: str) -> dt.timedelta:
    read = [moment for cell in cells if (moment := _read(cell, pattern)) is not None]
    plain = [moment.replace(tzinfo=None) for moment in read]
    return max(plain) - min(plain)


# --- Interval columns and quality -----------------------------------------------------------------


def _find_intervals(sample: Sample, draft: Draft) -> None:
    """Find columns that count through the day under one word, such as HE 1 to HE 24."""
    if "date" not in draft.columns:
        return
    taken = set(draft.columns.values())
    runs: list[list[int]] = []
    last: tuple[str, int] | None = None
    for place, heading in enumerate(sample.headings):
        key = _counted(heading)
        if key is None or place in taken:
            last = None
            continue
        if last is not None and runs and key[0] == last[0] and key[1] > last[1]:
            runs[-1].append(place)
        else:
            runs.append([place])
        last = key
    longest = max(runs, key=len, default=[])
    names = [sample.headings[place] for place in longest]
    if len(names) < min(DAY_COLUMNS) or all(map(INTERVAL_HEADING.fullmatch, names)):
        return
    draft.interval_columns = names
    draft.left_out = [place for place in draft.left_out if place not in longest]
    if not any(len(names) in (n, n + 60 // step) for n, step in DAY_COLUMNS.items()):
        draft.unsure["interval_columns"] = f"{len(names)} columns are not those of a day"


def _counted(heading: str) -> tuple[str, int] | None:
    """Return the word and the number of a heading that counts."""
    clock = re.fullmatch(r"(.*?)(\d{1,2}):(\d\d)(?::\d\d)?\s*([AaPp][Mm])?", heading.strip())
    if clock:
        hour = (
            int(clock[2]) % 12 + 12 * (clock[4].casefold() == "pm") if clock[4] else int(clock[2])
        )
        return bare(clock[1]), 60 * hour + int(clock[3])
    counted = re.fullmatch(r"(.*?)(\d{1,4})\D{0,6}", heading.strip())
    return (bare(counted[1]), int(counted[2])) if counted else None


def _find_quality(sample: Sample, draft: Draft) -> None:
    place = draft.columns.get("quality")
    if place is None:
        return
    codes = Counter(sample.column(place))
    if len(codes) > MOST_CODES:
        del draft.columns["quality"]
        draft.left_out.append(place)
        draft.remarks.append(f"{sample.headings[place]!r} holds too many words to be a quality.")
        return
    for code in codes:
        plain = code.casefold()
        if plain not in WORDS:
            draft.quality[code] = next(
                (word for word, theirs in QUALITY_WORDS.items() if plain in theirs), None
            )


# --- The guide as text ----------------------------------------------------------------------------


def _written(sample: Sample, draft: Draft) -> str:
    guide = tomlkit.document()
    _say(
        guide,
        f"Column guide, drafted from {Path(sample.name).name}. Look it through, above all the",
    )
    _say(guide, "lines marked as unsure, and give it with --columns.")
    for remark in draft.remarks:
        _say(guide, remark)
    for name, table in (
        ("columns", _columns_table(sample, draft)),
        ("units", _units_table(draft)),
        ("file", _file_table(sample, draft)),
        ("readings", _readings_table(sample, draft)),
        ("quality", _quality_table(draft)),
    ):
        if table.value.body:
            guide.add(tomlkit.nl())
            guide.add(name, table)
    return tomlkit.dumps(guide)


def _say(place: tomlkit.TOMLDocument | Table, text: str) -> None:
    place.add(tomlkit.comment(_one_line(text)))


def _one_line(text: str) -> str:
    return "".join(sign if sign.isprintable() else " " for sign in text)


def _add(table: Table, key: str, value: object, remark: str = "") -> None:
    item = tomlkit.item(value)
    if remark:
        item.comment(_one_line(f"unsure: {remark}"))
    table.add(key, item)


def _columns_table(sample: Sample, draft: Draft) -> Table:
    table = tomlkit.table()
    renamed = [
        ours for ours, at in draft.columns.items() if matched(sample.headings[at]) != matched(ours)
    ]
    if renamed:
        _say(table, "our heading = the heading in the file")
    for ours, place in draft.columns.items():
        heading = sample.headings[place]
        if ours in renamed:
            _add(table, ours, heading, draft.unsure.get(ours, ""))
        elif ours in draft.unsure:
            _say(table, f"unsure: {ours}: {draft.unsure[ours]}")
    if _VALUES & set(draft.columns) - {"rated_kva"} and not {"read_at", "date"} & set(
        draft.columns
    ):
        _say(table, 'read_at = ""  # not found: which column holds the times?')
    rest = [sample.headings[place] for place in draft.left_out if sample.headings[place]]
    if rest:
        more = f" and {len(rest) - SHOWN_COLUMNS:,} more" if len(rest) > SHOWN_COLUMNS else ""
        _say(table, f"not used: {', '.join(rest[:SHOWN_COLUMNS])}{more}")
        if _is_wide(draft, rest):
            _say(table, "This reads as one column a meter: their headings are the meters' ids.")
    return table


def _is_wide(draft: Draft, rest: Sequence[str]) -> bool:
    return (
        set(draft.columns) <= {"read_at", "quality"}
        and "read_at" in draft.columns
        and len(rest) > 1
    )


def _units_table(draft: Draft) -> Table:
    table = tomlkit.table()
    if draft.units:
        _say(table, "our heading = the unit in the file")
    for ours, unit in draft.units.items():
        _add(table, ours, unit, draft.unsure.get(ours, ""))
    return table


def _file_table(sample: Sample, draft: Draft) -> Table:
    table = tomlkit.table()
    if sample.separator is not None and sample.separator != draft.decimal:
        _add(table, "separator", sample.separator)
    if draft.decimal != ".":
        _add(table, "decimal", draft.decimal, draft.unsure.get("decimal", ""))
    if draft.thousands:
        _add(table, "thousands", draft.thousands)
    if sample.encoding is not None:
        _add(table, "encoding", sample.encoding, "not UTF-8; this is the likeliest")
    if sample.skip_lines:
        _add(table, "skip_lines", sample.skip_lines)
    return table


def _readings_table(sample: Sample, draft: Draft) -> Table:
    table = tomlkit.table()
    if draft.is_local:
        _say(table, 'timezone = "America/Chicago"  # times have no offset: which zone are they in?')
    if draft.stamps_at_end:
        _add(
            table, "stamps", "end", "a heading or a time of 24:00 speaks of the end of the interval"
        )
    elif "read_at" in draft.columns:
        _say(table, 'stamps = "end"  # if times mark the end of their interval, not the start')
    for key, pattern in (("stamp_format", draft.stamp_format), ("date_format", draft.date_format)):
        if pattern is not None:
            _add(table, key, pattern, draft.unsure.get(key, ""))
        elif key in draft.unsure:
            _say(table, f'{key} = ""  # {draft.unsure[key]}')
    if draft.interval_columns:
        remark = draft.unsure.get("interval_columns", "")
        _add(table, "interval_columns", draft.interval_columns, remark)
    names = [sample.headings[place] for place in draft.left_out]
    if "date" in draft.columns or _is_wide(draft, names):
        _say(
            table,
            'quantity = "kwh"  # what the cells are: kwh, kvarh, kw, kva, kvar, amps_lv, amps_hv',
        )
    return table


def _quality_table(draft: Draft) -> Table:
    table = tomlkit.table()
    if draft.quality:
        _say(table, "code in the file = measured, estimated, doubtful or missing")
    for code, word in draft.quality.items():
        if word is None or code == "scheme":
            key = tomlkit.item(code).as_string()
            _say(table, f'{key} = "measured"  # occurs, not known: what does it mean?')
        else:
            _add(table, code, word, "guessed from the usual words")
    return table


def _of_a_feed(path: Path, source: Source) -> str:
    """Return the guide of a Green Button feed, which needs none."""
    guide = tomlkit.document()
    _say(guide, f"{path.name} is a Green Button feed and says itself what it holds:")
    _say(guide, ", ".join(source.headings))
    _say(
        guide,
        "A guide is needed only where a meter is to be called by another name than the last part",
    )
    _say(guide, "of its UsagePoint's link: by the title of the UsagePoint, or by the whole link.")
    guide.add(tomlkit.nl())
    table = tomlkit.table()
    _say(table, 'meter_id = "title"')
    _say(table, 'meter_id = "href"')
    guide.add("columns", table)
    text = tomlkit.dumps(guide)
    guide_from(text, f"the draft for {path}")
    return text
