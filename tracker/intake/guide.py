"""The column guide: a small TOML file that says how a utility's files are meant.

::

    [columns]                  # our heading = the utility's own; several files may differ
    meter_id = "Device No"
    read_at  = ["Read Time", "Interval End"]
    kwh      = "Usage"

    [units]                    # our heading = unit in the file, or a factor into ours
    kwh = "Wh"

    [file]
    separator  = ";"
    decimal    = ","
    thousands  = "."
    encoding   = "windows-1252"
    skip_lines = 3             # before the headings

    [readings]
    timezone         = "America/Chicago"
    stamps           = "end"
    interval_minutes = 15
    quantity         = "kwh"
    power_factor     = 0.92
    stamp_format     = "%m/%d/%Y %H:%M"
    date_format      = "%m/%d/%Y"
    series           = "meter"
    interval_columns = ["HE 01", "HE 02"]

    [quality]                  # the utility's code = measured, estimated, doubtful or missing
    A = "measured"
    E = "estimated"

Every table and key may be left out. One guide may serve files of every kind: what a file does not
have is passed over, unless it is needed there.
"""

from __future__ import annotations

import codecs
import datetime as dt
import difflib
import math
import re
import tomllib
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Annotated, Any, Literal

import msgspec
from msgspec import Meta

from tracker.errors import InputError
from tracker.intake.quality import SCHEMES, WORDS
from tracker.intake.stamps import zone_of

#: Headings of ours that a guide may name, by the kind of file they belong to.
HEADINGS: dict[str, tuple[str, ...]] = {
    "units": (
        *("unit_id", "rated_kva", "feeder", "site_id", "installed_on", "removed_on", "phases"),
        *("hv_volts", "lv_volts", "impedance_pct", "winding_rise_c", "cooling", "mounting"),
        *("year_made", "no_load_loss_w", "load_loss_w", "latitude", "longitude", "customers"),
        *("critical_customers", "weather_station", "loss_ratio", "top_oil_rise_c"),
        *("hot_spot_rise_c", "oil_exponent", "winding_exponent", "top_oil_time_constant_h"),
        "winding_time_constant_h",
    ),
    "connections": (
        *("meter_id", "unit_id", "site_id", "starts_on", "ends_on", "multiplier"),
        *("power_factor", "class"),
    ),
    "loads": (
        *("meter_id", "unit_id", "read_at", "date", "quality"),
        *("kwh", "kvarh", "kw", "kva", "kvar", "amps_lv", "amps_hv"),
    ),
    "weather": ("station_id", "read_at", "air_temp_c", "air_temp_f", "quality"),
    "monthly": ("meter_id", "month", "kwh", "class"),
    "unmetered": ("site_id", "kw", "hours"),
}
ALL_HEADINGS = tuple(dict.fromkeys(heading for kind in HEADINGS.values() for heading in kind))

SEPARATORS = {",": ",", ";": ";", "\t": "tab", "|": "|"}
ENCODINGS = "utf-8, utf-16, windows-1252, latin-1, and others that Python knows"

_WATTS = {"W": "{} / 1000.0", "kW": "{}", "MW": "{} * 1000.0"}
#: Units a file may use under a heading of ours, and the SQL that turns each into ours.
UNITS: dict[str, dict[str, str]] = {
    "kwh": {"Wh": "{} / 1000.0", "kWh": "{}", "MWh": "{} * 1000.0"},
    "kvarh": {"varh": "{} / 1000.0", "kvarh": "{}", "Mvarh": "{} * 1000.0"},
    "kw": _WATTS,
    "kva": {"VA": "{} / 1000.0", "kVA": "{}", "MVA": "{} * 1000.0"},
    "kvar": {"var": "{} / 1000.0", "kvar": "{}", "Mvar": "{} * 1000.0"},
    "amps_lv": {"mA": "{} / 1000.0", "A": "{}", "kA": "{} * 1000.0"},
    "amps_hv": {"mA": "{} / 1000.0", "A": "{}", "kA": "{} * 1000.0"},
    "air_temp_c": {"°C": "{}", "°F": "({} - 32.0) / 1.8", "K": "{} - 273.15"},
    "rated_kva": {"VA": "{} / 1000.0", "kVA": "{}", "MVA": "{} * 1000.0"},
    "hv_volts": {"V": "{}", "kV": "{} * 1000.0"},
    "lv_volts": {"V": "{}", "kV": "{} * 1000.0"},
    "no_load_loss_w": {"W": "{}", "kW": "{} * 1000.0"},
    "load_loss_w": {"W": "{}", "kW": "{} * 1000.0"},
    "top_oil_time_constant_h": {"h": "{}", "min": "{} / 60.0"},
    "winding_time_constant_h": {"h": "{}", "min": "{} / 60.0"},
}

#: Codecs of Python that are no encodings of files.
_NO_ENCODINGS = ("idna", "punycode", "unicode_escape", "raw_unicode_escape", "unicode-escape")

_LARGEST_GUIDE_BYTES = 1_000_000


class FileForm(msgspec.Struct, frozen=True, forbid_unknown_fields=True, omit_defaults=True):
    """How the text of a CSV file is written."""

    separator: str | None = None  #: found from the headings unless given
    decimal: Literal[".", ","] = "."
    thousands: Literal[",", ".", " ", "'"] | None = None
    encoding: str | None = None  #: UTF-8 unless given
    skip_lines: Annotated[int, Meta(ge=0, le=10_000)] = 0  #: lines before the headings


class ReadingsForm(msgspec.Struct, frozen=True, forbid_unknown_fields=True, omit_defaults=True):
    """How readings are meant; what a command or call says itself stands before it."""

    timezone: str | None = None
    stamps: Literal["start", "end"] | None = None
    interval_minutes: Literal[5, 10, 15, 20, 30, 60] | None = None
    quantity: Literal["kwh", "kvarh", "kw", "kva", "kvar", "amps_lv", "amps_hv"] | None = None
    power_factor: Annotated[float, Meta(gt=0, le=1)] | None = None
    stamp_format: str | None = None
    date_format: str | None = None
    series: Literal["meter", "unit"] | None = None
    interval_columns: tuple[str, ...] = ()  #: their headings, in order from midnight


class ColumnGuide(msgspec.Struct, frozen=True, forbid_unknown_fields=True, omit_defaults=True):
    """A column guide that has been checked; the one made without arguments says nothing."""

    columns: dict[str, str | tuple[str, ...]] = {}
    units: dict[str, str | float] = {}
    file: FileForm = FileForm()
    readings: ReadingsForm = ReadingsForm()
    quality: dict[str, str] = {}
    name: str = "column guide"

    @property
    def timezone(self) -> str | None:
        """IANA zone of stamps and dates without an offset."""
        return self.readings.timezone

    @property
    def stamps(self) -> str | None:
        """Whether stamps mark the start or the end of their interval."""
        return self.readings.stamps

    @property
    def interval_min(self) -> int | None:
        """Length of the intervals [min]."""
        return self.readings.interval_minutes

    @property
    def quantity(self) -> str | None:
        """What the cells of a layout without value headings are."""
        return self.readings.quantity

    @property
    def power_factor(self) -> float | None:
        """What turns kW into kVA where no reactive reading stands beside it."""
        return self.readings.power_factor

    @property
    def stamp_format(self) -> str | None:
        """How stamps are written, as `datetime.strptime` takes it; None for ISO 8601."""
        return self.readings.stamp_format

    @property
    def date_format(self) -> str | None:
        """How dates are written, as `datetime.strptime` takes it; None for ISO 8601."""
        return self.readings.date_format

    @property
    def series(self) -> str | None:
        """Whether the columns of a file with one column each are meters or units."""
        return self.readings.series

    @property
    def interval_columns(self) -> tuple[str, ...]:
        """Headings of a day's intervals, in order from midnight."""
        return self.readings.interval_columns

    def as_text(self) -> str:
        """Return what the guide says as JSON, for the ledger; blank when it says nothing."""
        return msgspec.json.encode(self).decode() if self != ColumnGuide() else ""

    def named(self, heading: str) -> tuple[str, ...]:
        """Return the utility's own headings for one of ours."""
        theirs = self.columns.get(heading, ())
        return (theirs,) if isinstance(theirs, str) else theirs

    def unit_sql(self, heading: str, number: str) -> str:
        """Return the SQL that turns a number, as the file has it, into the unit of a heading."""
        unit = self.units.get(heading)
        if unit is None:
            return number
        if isinstance(unit, str):
            return f"({UNITS[heading][unit_named(heading, unit) or ''].format(number)})"
        return f"({number} * {float(unit)!r}::DOUBLE)"


def read_guide(path: Path | str) -> ColumnGuide:
    """Read and check a column guide.

    Raises
    ------
    InputError
        If it is not there, is no TOML, or says something that is not allowed; the message names
        the file, the key and what is allowed.
    """
    path = Path(path)
    if path.is_dir():
        raise InputError(f"{path} is a folder, not a column guide. Name a TOML file.")
    try:
        with path.open("rb") as file:
            content = file.read(_LARGEST_GUIDE_BYTES + 1)
    except FileNotFoundError:
        raise InputError(f"{path} is not there. Check the name and the folder.") from None
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read ({error}).") from error
    if len(content) > _LARGEST_GUIDE_BYTES:
        raise InputError(f"{path}: is larger than 1 MB; a column guide is a small TOML file.")
    return guide_from(content, str(path))


def guide_from(content: bytes | str, name: str = "column guide") -> ColumnGuide:
    """Check a column guide given as text; see `read_guide`."""
    try:
        text = content if isinstance(content, str) else content.decode("utf-8-sig")
        tables = tomllib.loads(text)
    except UnicodeDecodeError:
        raise InputError(f"{name}: is not UTF-8 text. Save the column guide as UTF-8.") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{name}: is not valid TOML: {_sentence(error)}.") from None
    except RecursionError:
        raise InputError(f"{name}: is not valid TOML: nested too deeply.") from None
    _check_keys(name, tables)
    try:
        guide = msgspec.convert({**tables, "name": name}, ColumnGuide)
    except msgspec.ValidationError as error:
        raise InputError(_explained(name, tables, error)) from None
    _check(guide)
    return guide


# --- Checks, each with one clear line -------------------------------------------------------------

_KEYS: dict[str, tuple[str, ...]] = {
    "file": FileForm.__struct_fields__,
    "readings": ReadingsForm.__struct_fields__,
}
_TABLES = ("columns", "units", "file", "readings", "quality")

#: What a value may be, for messages.
_ALLOWED = {
    "columns": 'a heading of your file in quotes, or several: ["Usage", "kWh"]',
    "units": 'a unit in quotes such as "Wh", or a factor such as 0.001',
    "quality": 'a word in quotes: "measured", "estimated", "doubtful" or "missing"',
    "file.separator": 'one of "," ";" "\\t" "|"',
    "file.decimal": '"." or ","',
    "file.thousands": 'one of "," "." " " "\'"',
    "file.encoding": f"an encoding in quotes: {ENCODINGS}",
    "file.skip_lines": "a whole number from 0 to 10000",
    "readings.timezone": 'an IANA name in quotes such as "America/Chicago"',
    "readings.stamps": '"start" or "end"',
    "readings.interval_minutes": "5, 10, 15, 20, 30 or 60",
    "readings.quantity": '"kwh", "kvarh", "kw", "kva", "kvar", "amps_lv" or "amps_hv"',
    "readings.power_factor": "a number above 0, up to 1",
    "readings.stamp_format": 'a pattern in quotes such as "%m/%d/%Y %H:%M"',
    "readings.date_format": 'a pattern in quotes such as "%m/%d/%Y"',
    "readings.series": '"meter" or "unit"',
    "readings.interval_columns": 'headings of your file, in order from midnight: ["H1", "H2"]',
}


def _sentence(error: Exception) -> str:
    text = " ".join(str(error).split()).rstrip(".")
    return text[:1].lower() + text[1:]


def _nearest(word: str, known: Iterable[str]) -> str:
    near = difflib.get_close_matches(word.casefold(), list(known), n=1, cutoff=0.6)
    return f" Did you mean {near[0]}?" if near else ""


def _check_keys(name: str, tables: Mapping[str, Any]) -> None:
    for table, content in tables.items():
        if table not in _TABLES:
            raise InputError(
                f"{name}: table [{table}] is not known; allowed: "
                f"{', '.join(f'[{known}]' for known in _TABLES)}.{_nearest(table, _TABLES)}"
            )
        if not isinstance(content, Mapping):
            raise InputError(f"{name}: {table} is not allowed there; write a table [{table}].")
        known = _KEYS.get(table, ALL_HEADINGS if table == "columns" else None)
        known = tuple(UNITS) if table == "units" else known
        for key in content:
            if known is not None and key not in known:
                numeric = table == "units" and key in ALL_HEADINGS
                what = "has no unit" if numeric else "is not known"
                near = "" if numeric else _nearest(key, known)
                allowed = "" if near else f"; allowed: {', '.join(known)}"
                raise InputError(f"{name}: [{table}] {key} {what}{allowed}.{near}")


def _explained(name: str, tables: Mapping[str, Any], error: msgspec.ValidationError) -> str:
    path = re.search(r"at `\$((?:\.\w+)*)", str(error))
    parts = path[1].lstrip(".").split(".") if path else []
    table = parts[0] if parts else ""
    content = tables.get(table, {})
    for key, value in content.items():
        allowed = _ALLOWED.get(f"{table}.{key}", _ALLOWED.get(table, ""))
        if len(parts) > 1 and parts[1] != key:
            continue
        if len(parts) == 1 and _fits(table, value):
            continue
        return f"{name}: [{table}] {key} = {value!r} is not allowed; allowed: {allowed}."
    return f"{name}: {_sentence(error)}."  # a form of message that is not known here


def _fits(table: str, value: object) -> bool:
    """Say whether a value is of a type that a table of free keys takes."""
    if table == "columns" and isinstance(value, list):
        return all(isinstance(each, str) for each in value)
    number = isinstance(value, (int, float)) and not isinstance(value, bool)
    return isinstance(value, str) or (table == "units" and number)


def _refuse(guide: ColumnGuide, table: str, key: str, value: object, allowed: str = "") -> None:
    allowed = allowed or _ALLOWED[f"{table}.{key}"]
    raise InputError(
        f"{guide.name}: [{table}] {key} = {value!r} is not allowed; allowed: {allowed}."
    )


def _check(guide: ColumnGuide) -> None:
    _check_columns(guide)
    _check_units(guide)
    _check_form(guide)
    _check_readings(guide)
    for code, word in guide.quality.items():
        if code == "scheme":
            if word not in SCHEMES:
                allowed = ", ".join(f'"{scheme}"' for scheme in SCHEMES)
                _refuse(guide, "quality", code, word, allowed)
        elif word not in WORDS:
            _refuse(guide, "quality", code, word, _ALLOWED["quality"])


def _check_columns(guide: ColumnGuide) -> None:
    owner: dict[str, str] = {}
    for ours in guide.columns:
        if not guide.named(ours):
            _refuse(guide, "columns", ours, [], _ALLOWED["columns"])
        for theirs in guide.named(ours):
            if not theirs.strip():
                _refuse(guide, "columns", ours, theirs, _ALLOWED["columns"])
            other = owner.setdefault(matched(theirs), ours)
            if other != ours:
                raise InputError(
                    f"{guide.name}: [columns] {theirs!r} is named for {other} and for {ours}; "
                    "name it for one of them."
                )


def _check_units(guide: ColumnGuide) -> None:
    for heading, unit in guide.units.items():
        if isinstance(unit, str):
            if unit_named(heading, unit) is None:
                units = ", ".join(f'"{known}"' for known in UNITS[heading])
                _refuse(guide, "units", heading, unit, f"{units}, or a factor")
        elif not (math.isfinite(unit) and unit > 0):
            _refuse(guide, "units", heading, unit, "a factor above 0")


def unit_named(heading: str, unit: str) -> str | None:
    """Return a unit as we write it. Case matters only where it tells milli from mega."""
    known = UNITS[heading]
    plain = unit.strip().replace("º", "°").replace("deg", "°")
    if plain in known:
        return plain
    if plain[:1] == "m":
        return None
    folded = {each.casefold().lstrip("°"): each for each in known}
    return folded.get(plain.casefold().lstrip("°"))


def _check_form(guide: ColumnGuide) -> None:
    form = guide.file
    if form.separator is not None and form.separator not in SEPARATORS:
        _refuse(guide, "file", "separator", form.separator)
    if form.separator == form.decimal:
        _refuse(guide, "file", "separator", form.separator, "another sign than the decimal one")
    if form.thousands == form.decimal:
        _refuse(guide, "file", "thousands", form.thousands, "another sign than the decimal one")
    if form.encoding is not None:
        try:
            usable = codecs.lookup(form.encoding).name not in _NO_ENCODINGS
            usable = usable and "a,b\n".encode(form.encoding).decode(form.encoding) == "a,b\n"
        except (LookupError, ValueError):
            usable = False
        if not usable:
            _refuse(guide, "file", "encoding", form.encoding)


_SAMPLE = dt.datetime(2025, 11, 23, 14, 35, tzinfo=dt.UTC)


def _check_readings(guide: ColumnGuide) -> None:
    form = guide.readings
    if form.timezone is not None:
        try:
            zone_of(form.timezone)
        except InputError:
            _refuse(guide, "readings", "timezone", form.timezone)
    if form.stamp_format is not None:
        _check_pattern(guide, "stamp_format", form.stamp_format, of_stamp=True)
    if form.date_format is not None:
        _check_pattern(guide, "date_format", form.date_format, of_stamp=False)
    theirs = [matched(heading) for heading in form.interval_columns]
    if form.interval_columns and (len(set(theirs)) < len(theirs) or "" in theirs):
        double = next(
            heading
            for heading, key in zip(form.interval_columns, theirs, strict=True)
            if not key or theirs.count(key) > 1
        )
        raise InputError(
            f"{guide.name}: [readings] interval_columns has {double!r} twice or blank; "
            f"allowed: {_ALLOWED['readings.interval_columns']}."
        )


def _check_pattern(guide: ColumnGuide, key: str, pattern: str, *, of_stamp: bool) -> None:
    """See whether a moment that is written by a pattern can be read again by it."""
    missing = "year, month and day" + (" and hour" if of_stamp else "")
    try:
        read = dt.datetime.strptime(_SAMPLE.strftime(pattern), pattern)
    except (ValueError, re.error, IndexError) as error:
        raise InputError(
            f"{guide.name}: [readings] {key} = {pattern!r} cannot be used ({_sentence(error)}); "
            f"allowed: {_ALLOWED[f'readings.{key}']}."
        ) from None
    same_day = read.date() == _SAMPLE.date()
    if not same_day or (of_stamp and read.hour != _SAMPLE.hour):
        raise InputError(
            f"{guide.name}: [readings] {key} = {pattern!r} does not tell {missing}; "
            f"allowed: {_ALLOWED[f'readings.{key}']}."
        )


def matched(heading: str) -> str:
    """Return a heading as it is compared: without regard to case, spaces or underscores.

    >>> matched(" Unit_ID")
    'unitid'
    """
    return "".join(heading.split()).replace("_", "").casefold()
