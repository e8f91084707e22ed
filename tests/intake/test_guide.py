"""The column guide: what it may say, how it says no, and the draft of one."""

from __future__ import annotations

import gzip
import itertools
import tomllib

import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tracker.errors import InputError, IntakeError
from tracker.intake.connections import COLUMNS as CONNECTION_COLUMNS
from tracker.intake.guide import HEADINGS, UNITS, ColumnGuide, guide_from, read_guide
from tracker.intake.guide_draft import draft_guide
from tracker.intake.guide_words import HEADING_WORDS, QUALITY_WORDS, bare
from tracker.intake.loads import ID_HEADINGS, QUANTITIES
from tracker.intake.monthly import COLUMNS as MONTHLY_COLUMNS
from tracker.intake.source import open_source
from tracker.intake.units import COLUMNS as UNIT_COLUMNS
from tracker.intake.unmetered import COLUMNS as UNMETERED_COLUMNS

EXAMPLES = settings(
    max_examples=60,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)

FULL = """
[columns]
meter_id = "Device No"
kwh = ["Usage", "Verbrauch"]

[units]
kwh = "Wh"
rated_kva = 0.001

[file]
separator = ";"
decimal = ","
thousands = "."
encoding = "windows-1252"
skip_lines = 3

[readings]
timezone = "America/Chicago"
stamps = "end"
interval_minutes = 15
quantity = "kwh"
power_factor = 0.92
stamp_format = "%m/%d/%Y %I:%M %p"
date_format = "%d.%m.%y"
series = "unit"
interval_columns = ["HE 01", "HE 02"]

[quality]
A = "measured"
9 = "estimated"
scheme = "ieee 2030.5"
"""


# --- What it says ---------------------------------------------------------------------------------


def test_everything_a_guide_may_say(tmp_path) -> None:
    """Each key of the documentation, read from a file."""
    path = tmp_path / "guide.toml"
    path.write_text(FULL, encoding="utf-8-sig")
    guide = read_guide(path)
    assert guide.name == str(path)
    assert guide.named("meter_id") == ("Device No",)
    assert guide.named("kwh") == ("Usage", "Verbrauch")
    assert guide.named("kva") == ()
    assert (guide.timezone, guide.stamps, guide.interval_min) == ("America/Chicago", "end", 15)
    assert (guide.quantity, guide.power_factor, guide.series) == ("kwh", 0.92, "unit")
    assert (guide.stamp_format, guide.date_format) == ("%m/%d/%Y %I:%M %p", "%d.%m.%y")
    assert guide.interval_columns == ("HE 01", "HE 02")
    assert guide.file.skip_lines == 3
    assert '"Device No"' in guide.as_text()


def test_an_empty_guide_says_nothing() -> None:
    """And neither does none."""
    guide = guide_from("")
    assert guide == ColumnGuide()
    assert guide.as_text() == ""
    assert (guide.timezone, guide.stamps, guide.interval_min, guide.power_factor) == (None,) * 4
    assert guide.unit_sql("kwh", "x") == "x"


def test_headings_of_the_guide_are_those_of_the_files() -> None:
    """A column that intake knows and the guide does not could never be mapped."""
    for kind, columns in (
        ("units", UNIT_COLUMNS),
        ("connections", CONNECTION_COLUMNS),
        ("monthly", MONTHLY_COLUMNS),
        ("unmetered", UNMETERED_COLUMNS),
    ):
        assert set(HEADINGS[kind]) == {column.heading for column in columns}
    assert set(HEADINGS["loads"]) == {*QUANTITIES, *ID_HEADINGS, "read_at", "date", "quality"}


@pytest.mark.parametrize(
    ("heading", "unit", "wanted"),
    [
        ("kwh", "Wh", "(x / 1000.0)"),
        ("kwh", "wh", "(x / 1000.0)"),
        ("kwh", "kwh", "(x)"),
        ("kwh", "MWh", "(x * 1000.0)"),
        ("air_temp_c", "F", "((x - 32.0) / 1.8)"),
        ("air_temp_c", "degF", "((x - 32.0) / 1.8)"),
        ("hv_volts", "kv", "(x * 1000.0)"),
        ("amps_lv", "mA", "(x / 1000.0)"),
    ],
)
def test_units(heading, unit, wanted) -> None:
    """Case counts only where it tells milli from mega."""
    guide = guide_from(f'[units]\n{heading} = "{unit}"')
    assert guide.unit_sql(heading, "x") == wanted


# --- How it says no -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("[colums]", r"table \[colums\] is not known; .* Did you mean columns\?"),
        ("columns = 3", r"write a table \[columns\]"),
        ('name = "x"', r"table \[name\] is not known"),
        ('[columns]\nmeter_idd = "x"', r"meter_idd is not known\. Did you mean meter_id\?"),
        ('[columns]\nzzz = "x"', "zzz is not known; allowed: unit_id, rated_kva"),
        ("[columns]\nmeter_id = 5", r"\[columns\] meter_id = 5 is not allowed; allowed: a heading"),
        ('[columns]\nkwh = ["a", 4]', r"kwh = \['a', 4\] is not allowed"),
        ("[columns]\nkwh = []", r"kwh = \[\] is not allowed"),
        ('[columns]\nkwh = " "', "kwh = ' ' is not allowed"),
        ('[columns]\nmeter_id = "X"\nunit_id = "x"', "'x' is named for meter_id and for unit_id"),
        ('[units]\nkwh = "mWh"', r"kwh = 'mWh' is not allowed; allowed: \"Wh\", \"kWh\", \"MWh\""),
        ('[units]\nkwh = "kW"', "kwh = 'kW' is not allowed"),
        ("[units]\nkwh = true", "kwh = True is not allowed"),
        ("[units]\nkwh = 0", r"kwh = 0.* is not allowed; allowed: a factor above 0"),
        ("[units]\nkwh = nan", "kwh = nan is not allowed"),
        ('[units]\ncooling = "x"', "cooling has no unit; allowed: kwh"),
        ('[file]\nseparator = "::"', "separator = '::' is not allowed; allowed: one of"),
        ('[file]\nseparator = ","\ndecimal = ","', "another sign than the decimal one"),
        ('[file]\nthousands = "."', "another sign than the decimal one"),
        ('[file]\ndecimal = ";"', "decimal = ';' is not allowed"),
        ("[file]\nskip_lines = -1", "skip_lines = -1 is not allowed; allowed: a whole number"),
        ('[file]\nskip_lines = "3"', "skip_lines = '3' is not allowed"),
        ('[file]\nencoding = "klingon"', "encoding = 'klingon' is not allowed; allowed: an encod"),
        ('[file]\nencoding = "base64"', "encoding = 'base64' is not allowed"),
        ('[file]\nencoding = "idna"', "encoding = 'idna' is not allowed"),
        ("[file]\nskip_line = 3", r"skip_line is not known\. Did you mean skip_lines\?"),
        (
            '[readings]\ntimezone = "Central"',
            "timezone = 'Central' is not allowed; allowed: an IANA",
        ),
        ('[readings]\nstamps = "middle"', "stamps = 'middle' is not allowed; allowed: \"start\""),
        ("[readings]\ninterval_minutes = 7", "interval_minutes = 7 is not allowed; allowed: 5, 10"),
        ('[readings]\nquantity = "MWh"', "quantity = 'MWh' is not allowed"),
        ("[readings]\npower_factor = 2", "power_factor = 2 is not allowed"),
        ('[readings]\nstamp_format = "%Q"', "stamp_format = '%Q' cannot be used"),
        ('[readings]\nstamp_format = "%"', "stamp_format = '%' cannot be used"),
        ('[readings]\nstamp_format = "%m/%d %H:%M"', "does not tell year, month and day and hour"),
        ('[readings]\nstamp_format = "%Y-%m-%d"', "does not tell year, month and day and hour"),
        ('[readings]\ndate_format = "%Y"', "does not tell year, month and day; allowed"),
        ('[readings]\ndate_format = "%Y%Y"', "cannot be used"),
        ('[readings]\ninterval_columns = ["a", "A"]', "interval_columns has 'a' twice or blank"),
        ("[readings]\ninterval_columns = [1]", r"interval_columns = \[1\] is not allowed"),
        ('[quality]\nA = "good"', "A = 'good' is not allowed; allowed: a word"),
        ("[quality]\nA = 1", "A = 1 is not allowed"),
        ('[quality]\nscheme = "x"', "scheme = 'x' is not allowed; allowed: \"ieee 2030.5\""),
        ("x = \n", r"is not valid TOML: .*\(at line 1, column 5\)"),
        ("[" * 5000, "is not valid TOML"),
        ("a = " + "[" * 5000, "is not valid TOML"),
        (b"\xff\xfe", "is not UTF-8 text"),
    ],
)
def test_what_is_not_allowed_is_one_clear_line(tmp_path, text, message) -> None:
    """File, key, what is allowed, and the nearest word where one is near."""
    path = tmp_path / "guide.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(InputError, match=message) as raised:
        read_guide(path)
    assert str(raised.value).startswith(str(path))
    assert "\n" not in str(raised.value)


def test_guides_that_are_not_there(tmp_path) -> None:
    """A folder, a typing error, a file of the wrong kind."""
    (tmp_path / "big.toml").write_bytes(b"#" * 1_000_001)
    for path, message in (
        (tmp_path, "is a folder"),
        (tmp_path / "none.toml", "is not there"),
        (tmp_path / "big.toml", "larger than 1 MB"),
        (str(tmp_path / "a\0b"), "cannot be read|not there"),
    ):
        with pytest.raises(InputError, match=message):
            read_guide(path)


VALUES = st.recursive(
    st.one_of(st.text(max_size=12), st.integers(-5, 10**6), st.floats(), st.booleans(), st.dates()),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=5), inner, max_size=3)
    ),
    max_leaves=4,
)
KEYS = st.sampled_from(
    [
        *ColumnGuide.__struct_fields__,
        *HEADINGS["loads"],
        "separator",
        "decimal",
        "encoding",
        "stamp_format",
    ]
)


@given(
    st.dictionaries(KEYS, st.one_of(VALUES, st.dictionaries(KEYS, VALUES, max_size=3)), max_size=4)
)
@EXAMPLES
def test_whatever_a_guide_says(tmp_path, content) -> None:
    """It is read, or it is refused with one line."""
    import tomlkit

    path = tmp_path / "guide.toml"
    path.write_text(tomlkit.dumps(content), encoding="utf-8", newline="")
    said = ""
    try:
        read_guide(path)
    except InputError as error:
        said = str(error)
    assert "\n" not in said


# --- One guide for all files ----------------------------------------------------------------------


def test_a_utility_that_writes_everything_its_own_way(utility, fates) -> None:
    """No file has to be edited: headings, units, codes, dates, numbers and an encoding of its own."""
    guide = guide_from(
        """
        [columns]
        unit_id = "Trafo"
        rated_kva = "Nennleistung"
        site_id = "Ort"
        installed_on = "Seit"
        starts_on = "Ab"
        meter_id = "Zähler"
        read_at = "Zeit"
        kwh = "Verbrauch"
        air_temp_c = "Temperatur"
        quality = "Status"
        [units]
        rated_kva = "MVA"
        kwh = "Wh"
        air_temp_c = "K"
        [file]
        decimal = ","
        encoding = "windows-1252"
        [readings]
        timezone = "UTC"
        stamps = "end"
        stamp_format = "%d.%m.%Y %H:%M"
        date_format = "%d.%m.%Y"
        power_factor = 1.0
        [quality]
        W = "measured"
        E = "estimated"
        """
    )

    def take(kind: str, text: str) -> tuple[int, ...]:
        return fates(utility.take(kind, utility.file(text.encode("windows-1252")), guide=guide))

    assert take("units", "Trafo;Nennleistung;Ort;Seit\nT;0,025;Süd;01.02.2020\n") == (1, 0, 0, 0)
    assert take("connections", "Zähler;Ort;Ab\nZ1;Süd;01.02.2020\n") == (1, 0, 0, 0)
    rows = "".join(
        f"Z1;01.07.2025 {hour:02d}:00;{hour}500,0;{'EW'[hour % 2]}\n" for hour in range(1, 5)
    )
    assert take("loads", f"Zähler;Zeit;Verbrauch;Status\n{rows}") == (4, 0, 0, 0)
    assert utility.site_load("Süd").tolist() == [1.5, 2.5, 3.5, 4.5]
    assert str(utility.site_load("Süd").index[0]) == "2025-07-01 00:00:00+00:00"
    assert take(
        "weather", "Zeit;Temperatur\n01.07.2025 01:00;300,15\n01.07.2025 02:00;301,15\n"
    ) == (2, 0, 0, 0)
    assert utility.readings("", "air_temp_c", "station").tolist() == pytest.approx([27.0, 28.0])
    assert utility.problems() == []


def test_a_column_that_a_guide_names_and_the_file_lacks(utility) -> None:
    """Needed there, it is named; not needed, it is passed over."""
    guide = guide_from('[columns]\nmeter_id = "Device"\nunit_id = "Bank"\nrated_kva = "Size"')
    utility.take("units", "Bank,Size\nT,25\n", guide=guide)
    with pytest.raises(IntakeError, match="Bank"):
        utility.take("units", "Unit,Size\nT,25\n", guide=guide_from('[columns]\nunit_id = "Bank"'))


# --- The draft ------------------------------------------------------------------------------------


def drafted(folder, content: str | bytes, name: str = "file.csv") -> tuple[str, ColumnGuide]:
    path = folder / name
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    text = draft_guide(path)
    return text, guide_from(text)


MONTH_FIRST = [f"7/{day}/2025 {hour}:00" for day in (12, 13, 14) for hour in range(24)]
DAY_FIRST = [f"{day}.7.2025 {hour}:00" for day in (12, 13, 14) for hour in range(24)]


def test_a_draft_reads_the_file_it_was_made_from(utility, fates) -> None:
    """Semicolons, decimal commas, a title, Wh, days first, codes: all found, and taken in as meant."""
    rows = "".join(
        f"{meter};{stamp};1.{place:03d},5;{'A' if place else 'Est'};x\n"
        for meter in ("M-1", "M-2")
        for place, stamp in enumerate(DAY_FIRST)
    )
    content = f"Readings of July\n\nMeter No;Read Date/Time;Usage (Wh);Status;Remark\n{rows}"
    path = utility.file(content.encode("windows-1252") + "M-3;Ä\n".encode("windows-1252"))
    text = draft_guide(path)
    guide = guide_from(text)
    assert "not used: Remark" in text
    assert guide.stamp_format == "%d.%m.%Y %H:%M"
    assert dict(guide.quality) == {"Est": "estimated", "A": "measured"}
    report = utility.take("loads", path, guide=guide, timezone="UTC", power_factor=1)
    assert fates(report) == (144, 0, 0, 1)
    assert utility.readings("M-1").iloc[:2].tolist() == pytest.approx([1.0005, 1.0015])
    assert utility.take("loads", path, guide=guide, timezone="UTC").fates.unchanged == 144


@pytest.mark.parametrize(
    "pack",
    [lambda data: data, gzip.compress, lambda data: bytes(pa.compress(data, "zstd", asbytes=True))],
)
def test_drafts_of_packed_files(tmp_path, pack) -> None:
    """The form is told by content."""
    rows = "".join(f"1,{stamp},2\n" for stamp in MONTH_FIRST)
    _, guide = drafted(tmp_path, pack(f"Device,Interval End,kWh Delivered\n{rows}".encode()), "x")
    assert guide.named("read_at") == ("Interval End",)
    assert guide.named("kwh") == ("kWh Delivered",)
    assert (guide.stamps, guide.stamp_format) == ("end", "%m/%d/%Y %H:%M")
    assert guide.file.separator == ","


def test_drafts_of_one_row_a_day(tmp_path) -> None:
    """Columns that count through the day under a word of the utility's own."""
    names = [f"HE {hour}" for hour in range(1, 26)]
    text, guide = drafted(
        tmp_path, f"Meter,Day,{','.join(names)}\nA,7/13/2025,{','.join('1' * 24)},\n"
    )
    assert list(guide.interval_columns) == names
    assert guide.named("date") == ("Day",)
    assert guide.date_format == "%m/%d/%Y"
    assert "quantity" in text
    quarter = [
        f"{(hour + 11) % 12 + 1}:{minute:02d} {'AP'[hour // 12]}M"
        for hour in range(24)
        for minute in (0, 15, 30, 45)
    ]
    _, guide = drafted(
        tmp_path, f"Meter,Day,{','.join(quarter)}\nA,7/13/2025,{','.join('1' * 96)}\n"
    )
    assert list(guide.interval_columns) == quarter


def test_drafts_of_registers(tmp_path) -> None:
    """Words that mean one thing among units and another among readings: kVA is the rating here."""
    _, guide = drafted(
        tmp_path,
        "Transformer No\tkVA\tCircuit\tPrimary kV\tLat\tInstall Date\nT1\t25\tF\t7.2\t44.1\t13/05/2001\n",
    )
    assert guide.named("unit_id") == ("Transformer No",)
    assert guide.named("rated_kva") == ("kVA",)
    assert guide.named("feeder") == ("Circuit",)
    assert guide.named("installed_on") == ("Install Date",)
    assert guide.date_format == "%d/%m/%Y"
    assert guide.units == {"hv_volts": "kV"}
    assert guide.file.separator == "\t"
    _, guide = drafted(tmp_path, "Meter,Transformer,Multiplier\nM,T,1\n")
    assert (guide.named("meter_id"), guide.named("unit_id")) == (("Meter",), ("Transformer",))


def test_drafts_of_weather(tmp_path) -> None:
    """Fahrenheit is said by the heading, or suspected from the figures."""
    text, guide = drafted(tmp_path, "Station,Valid,Temp (F)\nK,2025-07-01 00:00,88\n")
    assert guide.named("station_id") == ("Station",)
    assert guide.units == {"air_temp_c": "°F"}
    assert "timezone" in text
    text, guide = drafted(tmp_path, "Time,Temperature\n2025-07-01 00:00,88\n")
    assert guide.units == {"air_temp_c": "°F"}
    assert "unsure: the heading does not say whether degrees are °C or °F" in text


@pytest.mark.parametrize(
    ("stamps", "pattern", "said"),
    [
        (MONTH_FIRST, "%m/%d/%Y %H:%M", ""),
        (DAY_FIRST, "%d.%m.%Y %H:%M", ""),
        (
            ["07/01/2025 00:00", "08/01/2025 00:00", "09/01/2025 00:00"],
            "%d/%m/%Y %H:%M",
            "likelier",
        ),
        ([f"{day:02d}/07/2025 00:00" for day in range(4, 14)], "%d/%m/%Y %H:%M", ""),
        (["07/07/2025 00:00", "07/07/2025 01:00"], "%m/%d/%Y %H:%M", "cannot be told"),
        (["13-Jul-25 1:00 PM", "14-Jul-25 2:00 AM"], "%d-%b-%y %I:%M %p", ""),
        (["20250713 0100", "20250713 0200"], None, ""),
        (["Jul 13, 2025, 01:00:05"], "%b %d, %Y, %H:%M:%S", ""),
        (["7/13/2025 01:00 -05:00"], "%m/%d/%Y %H:%M %z", ""),
        (["2025/07/13 01:00"], "%Y/%m/%d %H:%M", ""),
        (["2025-07-13T01:00Z", "2025-07-13 02:00"], None, ""),
        (["7/13/2025 23:00", "7/13/2025 24:00"], "%m/%d/%Y %H:%M", "24:00"),
        (["the 13th of July", "the 14th"], None, "was not recognised"),
    ],
)
def test_how_stamps_are_written_is_told_from_the_data(tmp_path, stamps, pattern, said) -> None:
    """And where it cannot be, a comment says so."""
    rows = "".join(f'1|"{stamp}"|2\n' for stamp in stamps)
    text, guide = drafted(tmp_path, f"Meter|Timestamp|Consumption\n{rows}")
    assert guide.stamp_format == pattern
    assert said in text
    of_pattern = [line for line in text.splitlines() if line.startswith("stamp_format")]
    assert all(
        ("unsure" in line) == (said in ("likelier", "cannot be told")) for line in of_pattern
    )


def test_codes_that_are_not_known_are_left_to_the_person(tmp_path) -> None:
    """A guess would be a lie; the line stands ready as a comment."""
    rows = "".join(f"1,2025-07-01T{hour:02d}:00Z,2,{['A', 'ZQ'][hour % 2]}\n" for hour in range(9))
    text, guide = drafted(tmp_path, f"Meter,Timestamp,kWh,Status\n{rows}")
    assert dict(guide.quality) == {"A": "measured"}
    assert '# "ZQ" = "measured"  # occurs, not known: what does it mean?' in text
    assert guide_from(text.replace('# "ZQ"', '"ZQ"')).quality["ZQ"] == "measured"


def test_two_columns_of_time_and_two_directions_are_remarked(tmp_path) -> None:
    """What a guide cannot mend is said."""
    text, _ = drafted(tmp_path, "Meter,Date,Time,kWh,kWh Received\nM,7/13/2025,01:00,1,0\n")
    assert "stands in two columns, 'Date' and 'Time'" in text
    assert "'kWh Received' seems to be energy received" in text


def test_a_file_by_our_rules_needs_no_names(tmp_path) -> None:
    """Only what is doubtful is said."""
    text, guide = drafted(tmp_path, "meter_id,read_at,kwh\nA,2025-07-01T00:00Z,1\n")
    assert dict(guide.columns) == {}
    assert guide.stamp_format is None
    assert "timezone" not in text


def test_one_column_a_meter(tmp_path) -> None:
    """The headings are ids; nothing to be named but the time."""
    text, guide = drafted(tmp_path, "Time,M1,M2,M3\n2025-07-01 00:00,1,2,3\n")
    assert dict(guide.columns) == {"read_at": "Time"}
    assert "one column a meter" in text


def test_drafts_of_other_forms(tmp_path) -> None:
    """Parquet has types and no separator; a feed says itself what it holds."""
    frame = pd.DataFrame(
        {"Meter No": ["A"], "Timestamp": [pd.Timestamp("2025-07-01", tz="UTC")], "kWh": [1.5]}
    )
    frame.to_parquet(tmp_path / "x.parquet")
    guide = guide_from(draft_guide(tmp_path / "x.parquet"))
    assert guide.named("meter_id") == ("Meter No",)
    assert guide.file.separator is None
    rows = [
        row
        for batch in open_source(tmp_path / "x.parquet", guide).batches({"k": "1"})
        for row in batch.to_pylist()
    ]
    assert len(rows) == 1


@given(
    st.lists(st.lists(st.text(max_size=12), min_size=1, max_size=6), min_size=1, max_size=6),
    st.sampled_from([",", ";", "\t"]),
)
@EXAMPLES
def test_a_draft_is_a_valid_guide_whatever_the_file(tmp_path, rows, separator) -> None:
    """Quotes, control characters and emptiness in headings must not spoil the TOML."""
    content = "\n".join(separator.join(row) for row in rows)
    said = ""
    try:
        text, _ = drafted(tmp_path, content.encode("utf-8", "replace"))
        tomllib.loads(text)
    except IntakeError as error:
        said = str(error)
    assert "\n" not in said


def test_words_are_written_as_they_are_compared() -> None:
    """And none is claimed by two of the four qualities."""
    assert set(HEADING_WORDS) <= {heading for kind in HEADINGS.values() for heading in kind}
    for words in [*HEADING_WORDS.values(), *QUALITY_WORDS.values()]:
        assert [bare(word) for word in words] == list(words)
    qualities = list(itertools.chain(*QUALITY_WORDS.values()))
    assert len(qualities) == len(set(qualities))
    assert set(UNITS) <= {heading for kind in HEADINGS.values() for heading in kind}
