"""Green Button feeds (NAESB REQ.21, ESPI): how entries are linked, units, directions, what is refused.

The structure of the feeds here is from memory of the published ESPI schema.
"""

from __future__ import annotations

import gzip
import itertools
from typing import Any

import numpy as np
import pandas as pd
import pytest

from tracker.errors import IntakeError
from tracker.intake.guide import guide_from
from tracker.intake.report import Findings
from tracker.intake.source import open_source

START = 1_751_328_000  # 2025-07-01T00:00Z
HOST = "https://utility.invalid/espi/1_1/resource"
WH, W, VA, VAH, VAR, VARH, AMPS = 72, 38, 61, 71, 63, 73, 5


def entry(
    content: str, own: str, up: str = "", related: tuple[str, ...] = (), title: str = ""
) -> str:
    links = [f'<link rel="self" href="{own}"/>', f'<link rel="up" href="{up}"/>' if up else ""]
    links += [f'<link rel="related" href="{each}"/>' for each in related]
    return (
        f"<entry><id>urn:uuid:0</id>\n{''.join(links)}\n<title>{title}</title>"
        f"<content>{content}</content></entry>\n"
    )


def point(name: str, title: str = "", customer: int = 1) -> str:
    own = f"{HOST}/RetailCustomer/{customer}/UsagePoint/{name}"
    content = '<UsagePoint xmlns="http://naesb.org/espi"><ServiceCategory><kind>0</kind></ServiceCategory></UsagePoint>'
    return entry(
        content,
        own,
        f"{HOST}/RetailCustomer/{customer}/UsagePoint",
        (f"{own}/MeterReading",),
        title,
    )


def meter_reading(name: str, number: int, kind: int | None, customer: int = 1) -> str:
    up = f"{HOST}/RetailCustomer/{customer}/UsagePoint/{name}/MeterReading"
    related = [f"{up}/{number}/IntervalBlock"]
    if kind is not None:
        related.append(f"{HOST}/ReadingType/{kind}")
    return entry(
        '<MeterReading xmlns="http://naesb.org/espi"/>', f"{up}/{number}", up, tuple(related)
    )


def reading_type(number: int, uom: int, power: int | str = 0, flow: int = 1, more: str = "") -> str:
    content = (
        '<ReadingType xmlns="http://naesb.org/espi"><commodity>1</commodity>'
        f"<flowDirection>{flow}</flowDirection>{more}"
        f"<powerOfTenMultiplier>{power}</powerOfTenMultiplier><uom>{uom}</uom></ReadingType>"
    )
    return entry(content, f"{HOST}/ReadingType/{number}", f"{HOST}/ReadingType")


def block(
    name: str,
    number: int,
    readings: list[tuple[Any, Any, Any]],
    customer: int = 1,
    quality: str = "",
) -> str:
    up = f"{HOST}/RetailCustomer/{customer}/UsagePoint/{name}/MeterReading/{number}/IntervalBlock"
    inner = "".join(
        f"<IntervalReading>{quality}<timePeriod><duration>{length}</duration>\n<start>{start}</start>"
        f"</timePeriod><value>{value}</value></IntervalReading>\n"
        for start, length, value in readings
    )
    content = (
        '<IntervalBlock xmlns="http://naesb.org/espi"><interval><duration>86400</duration>'
        f"<start>{START}</start></interval>\n{inner}</IntervalBlock>"
    )
    return entry(content, f"{up}/1", up)


def feed(*entries: str) -> str:
    return (
        '<?xml version="1.0" encoding="UTF-8"?>\n<feed xmlns="http://www.w3.org/2005/Atom">\n'
        + "".join(entries)
        + "</feed>\n"
    )


def hours(values, length: int = 3600) -> list[tuple[int, int, Any]]:
    return [(START + length * place, length, value) for place, value in enumerate(values)]


def one(uom: int, values, *, power: int = 0, flow: int = 1, length: int = 3600, **more: Any) -> str:
    return feed(
        point("M"),
        meter_reading("M", 1, 7),
        reading_type(7, uom, power, flow, **more),
        block("M", 1, hours(values, length)),
    )


@pytest.fixture
def rows(tmp_path):
    """Write a feed, and return its rows by heading."""
    numbers = itertools.count()

    def read(text: str | bytes, guide: str = "") -> list[dict[str, str | None]]:
        path = tmp_path / f"{next(numbers)}.xml"
        path.write_bytes(text.encode() if isinstance(text, str) else text)
        source = open_source(path, guide_from(guide))
        select = {heading: source.text_of(heading) for heading in source.headings}
        return [row for batch in source.batches(select) for row in batch.to_pylist()]

    return read


@pytest.fixture
def source(tmp_path):
    """Write a feed, and open it."""

    def made(text: str, guide: str = ""):
        (tmp_path / "feed.xml").write_text(text)
        return open_source(tmp_path / "feed.xml", guide_from(guide))

    return made


def refused(source) -> list[tuple[int, str]]:
    for _ in source.batches({"c": source.cell_of("read_at")}):
        pass
    return [(each.line, each.code) for each in source.refusals(Findings())]


# --- What readings mean ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("uom", "power", "length", "heading", "value"),
    [
        (WH, 0, 3600, "kwh", "1.5"),  # 1,500 Wh
        (WH, 3, 3600, "kwh", "1500.0"),
        (WH, -3, 3600, "kwh", "0.0015"),
        (W, 0, 900, "kw", "1.5"),
        (VA, 0, 900, "kva", "1.5"),
        (VAH, 0, 900, "kva", "6.0"),  # 1.5 kVAh in a quarter hour
        (VAR, 0, 900, "kvar", "1.5"),
        (VARH, 0, 900, "kvarh", "1.5"),
        (AMPS, -2, 900, "amps_lv", "15.0"),
    ],
)
def test_units_of_measure(rows, uom, power, length, heading, value) -> None:
    """The codes of `uom` and the power of ten; energy stays energy, but VAh, which we have no column of."""
    (row,) = rows(one(uom, [1500], power=power, length=length))
    assert row[heading] == value
    assert row["meter_id"] == "M"
    assert row["read_at"] == "2025-07-01T00:00:00Z"


def test_quantities_of_a_meter_share_a_row(rows) -> None:
    """Active and reactive energy of one interval become one reading with two values."""
    found = rows(
        feed(
            point("M"),
            *[meter_reading("M", number, number) for number in (1, 2)],
            reading_type(1, WH),
            reading_type(2, VARH),
            block("M", 1, hours([3000, 3000])),
            block("M", 2, hours([4000])),
        )
    )
    assert [(row["kwh"], row["kvarh"]) for row in found] == [("3.0", "4.0"), ("3.0", None)]


def test_delivered_and_received_are_netted(rows) -> None:
    """flowDirection 1 is delivered to the customer, 19 received from them (from memory)."""
    found = rows(
        feed(
            point("M"),
            *[meter_reading("M", number, number) for number in (1, 2)],
            reading_type(1, WH, flow=1),
            reading_type(2, WH, flow=19),
            block("M", 1, hours([3000, 1000])),
            block("M", 2, hours([500, 2500, 700])),
        )
    )
    assert [row["kwh"] for row in found] == ["2.5", "-1.5", "-0.7"]


def test_a_reading_that_stands_twice_is_two_rows(rows) -> None:
    """Blocks of a feed overlap at midnight; adding them up would double the load."""
    found = rows(
        feed(
            point("M"),
            meter_reading("M", 1, 7),
            reading_type(7, WH),
            block("M", 1, hours([1000, 2000])),
            block("M", 1, hours([1000])),
        )
    )
    assert [row["kwh"] for row in found] == ["1.0", "2.0", "1.0"]


def test_several_meters_and_interval_lengths(rows) -> None:
    """Old hourly meters beside quarter-hour ones."""
    found = rows(
        feed(
            point("A"),
            point("B"),
            meter_reading("A", 1, 7),
            meter_reading("B", 1, 7),
            reading_type(7, WH),
            block("A", 1, hours([1, 2], 3600)),
            block("B", 1, hours([3, 4], 900)),
        )
    )
    assert [(row["meter_id"], row["read_at"][11:16]) for row in found] == [
        ("A", "00:00"),
        ("A", "01:00"),
        ("B", "00:00"),
        ("B", "00:15"),
    ]


@pytest.mark.parametrize(
    ("codes", "default", "word"),
    [
        ((), "", None),
        ((0,), "", "measured"),
        ((8,), "", "estimated"),
        ((17, 10), "", "doubtful"),
        ((), "9", "estimated"),
        ((19,), "9", "measured"),
        ((3,), "", "ESPI 3"),
    ],
)
def test_qualities(rows, codes, default, word) -> None:
    """Codes of ReadingQuality in our words, the worst of several; else the type's default quality."""
    quality = "".join(
        f"<ReadingQuality><quality>{code}</quality></ReadingQuality>" for code in codes
    )
    more = f"<defaultQuality>{default}</defaultQuality>" if default else ""
    (row,) = rows(
        feed(
            point("M"),
            meter_reading("M", 1, 7),
            reading_type(7, WH, more=more),
            block("M", 1, hours([1]), quality=quality),
        )
    )
    assert row["quality"] == word


def test_a_guide_may_say_what_a_quality_means(rows) -> None:
    """A utility that uses a code of its own."""
    quality = "<ReadingQuality><quality>3</quality></ReadingQuality>"
    text = feed(
        point("M"),
        meter_reading("M", 1, 7),
        reading_type(7, WH),
        block("M", 1, hours([1]), quality=quality),
    )
    (row,) = rows(text, '[quality]\n3 = "estimated"')
    assert row["quality"] == "estimated"


# --- How entries are linked -----------------------------------------------------------------------


def test_entries_in_any_order(rows) -> None:
    """Atom does not order entries; a type may come after the readings it speaks of."""
    parts = [
        point("M"),
        meter_reading("M", 1, 7),
        reading_type(7, WH, 3),
        block("M", 1, hours([2])),
    ]
    for order in itertools.permutations(parts):
        (row,) = rows(feed(*order))
        assert (row["meter_id"], row["kwh"]) == ("M", "2.0")


def test_links_of_many_forms(rows) -> None:
    """Relative links, slashes at the end, no collections named: the way from self to self is enough."""
    text = feed(
        entry('<e:UsagePoint xmlns:e="http://naesb.org/espi"/>', "RetailCustomer/9/UsagePoint/01/"),
        entry(
            '<e:MeterReading xmlns:e="http://naesb.org/espi"/>',
            "RetailCustomer/9/UsagePoint/01/MeterReading/1",
            related=("ReadingType/7/",),
        ),
        entry(
            '<e:ReadingType xmlns:e="http://naesb.org/espi"><e:uom>72</e:uom></e:ReadingType>',
            "ReadingType/7",
        ),
        entry(
            '<e:IntervalBlock xmlns:e="http://naesb.org/espi"><e:IntervalReading><e:timePeriod>'
            f"<e:duration>900</e:duration><e:start>{START}</e:start></e:timePeriod><e:value>5</e:value>"
            "</e:IntervalReading></e:IntervalBlock>",
            "RetailCustomer/9/UsagePoint/01/MeterReading/1/IntervalBlock/0173?x=1",
        ),
    )
    (row,) = rows(text)
    assert (row["meter_id"], row["kwh"]) == ("01", "0.005")


def test_a_guide_may_name_the_meter_by_title(rows) -> None:
    """Some utilities write the meter's number into the title of the UsagePoint."""
    text = feed(
        point("1", "M-0000007"),
        meter_reading("1", 1, 7),
        reading_type(7, WH),
        block("1", 1, hours([1])),
    )
    assert rows(text)[0]["meter_id"] == "1"
    assert rows(text, '[columns]\nmeter_id = ["Device No", "title"]')[0]["meter_id"] == "M-0000007"
    assert rows(text, '[columns]\nmeter_id = "Device No"')[0]["meter_id"] == "1"
    assert rows(text, '[columns]\nunit_id = "usage_point"')[0]["unit_id"] == "1"


def test_two_usage_points_of_one_name_stop_the_file(rows) -> None:
    """Two customers' first usage points are not one meter."""
    text = feed(
        *[
            part
            for customer in (1, 2)
            for part in (
                point("1", f"M-{customer}", customer),
                meter_reading("1", 1, 7, customer),
                block("1", 1, hours([customer]), customer),
            )
        ],
        reading_type(7, WH),
    )
    with pytest.raises(IntakeError, match="2 UsagePoints have the usage_point '1'"):
        rows(text)
    found = rows(text, '[columns]\nmeter_id = "title"')
    assert [(row["meter_id"], row["kwh"]) for row in found] == [("M-1", "0.001"), ("M-2", "0.002")]


# --- What cannot be taken -------------------------------------------------------------------------


def test_what_is_no_load_is_named_and_left_out(source) -> None:
    """Volts, registers that count up, and totals of both directions are no load of an interval."""
    more = "<accumulationBehaviour>3</accumulationBehaviour>"
    feeds = source(
        feed(
            point("M"),
            *[meter_reading("M", number, number) for number in (1, 2, 3, 4)],
            reading_type(1, WH),
            reading_type(2, 29),
            reading_type(3, WH, more=more),
            reading_type(4, WH, flow=20),
            *[block("M", number, hours([1])) for number in (1, 2, 3, 4)],
        )
    )
    left_out = feeds.left_out(["meter_id", "read_at", "kwh", "quality"])
    assert [each.partition(" (")[2] for each in left_out] == [
        "unit of measure '29' is no load)",
        "accumulation behaviour 3 is a register that counts up)",
        "flow direction 20 is neither of the two)",
    ]
    assert refused(feeds) == []


def test_readings_without_a_meter_and_of_odd_lengths_are_refused(source) -> None:
    """A day's sum is no interval; a block that belongs to nothing is told row by row."""
    text = feed(
        point("M"),
        meter_reading("M", 1, 7),
        reading_type(7, WH),
        block("M", 1, [(START, 900, 1), (START, 86_400, 96), (START + 900, 900, 1)]),
        block("M", 9, hours([1])),
    )
    assert refused(source(text)) == [
        (text[: text.index("86400</duration>\n<start>")].count("\n") + 1, "interval.length"),
        (text[: text.rindex("<IntervalReading>")].count("\n") + 1, "reading.no_meter"),
    ]


def test_apparent_energy_needs_the_length_of_its_interval(source) -> None:
    """VAh become kVA only over a known time."""
    assert [code for _, code in refused(source(one(VAH, [1], length=0)))] == ["interval.length"]
    text = one(VAH, [1]).replace("<duration>3600</duration>", "")
    assert [code for _, code in refused(source(text))] == ["interval.length"]


def test_lines_are_those_of_the_readings(source) -> None:
    """Also beyond 65,535, where parsers lose count."""
    text = one(WH, range(30_000)).replace("<IntervalReading>", "<IntervalReading>\n")
    feeds = source(text)
    n_row = sum(len(batch) for batch in feeds.batches({"c": feeds.cell_of("kwh")}))
    assert n_row == 30_000
    findings = Findings()
    findings.add([29_999, 0, 29_999], "kwh", "x", "why")
    found = list(feeds.refusals(findings))
    lines = text.splitlines()
    last = max(place for place, line in enumerate(lines) if line.endswith("<IntervalReading>"))
    assert last > 65_535
    assert [each.line for each in found] == [
        lines.index("<IntervalReading>") + 1,
        last + 1,
        last + 1,
    ]
    assert found[1].text == f"start {START + 29_999 * 3600}, duration 3600, value 29999"


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda text: text[:-40], r"not valid XML: unclosed token \(line 19\)"),
        (lambda text: text.replace("</value>", ""), r"not valid XML: mismatched tag \(line 16\)"),
        (lambda text: text.replace("72<", "\x0172<"), "not valid XML: not well-formed"),
        (lambda text: text.replace("UTF-8", "klingon"), "not valid XML: unknown encoding"),
        (
            lambda text: text.replace("<uom>72", "<uom>169"),
            r"no interval readings.*'169' is no load",
        ),
        (lambda text: "<html><body>no</body></html>", "is no Green Button feed"),
        (
            lambda text: text.replace("<feed ", '<!DOCTYPE x [<!ENTITY e "1">]><feed '),
            "declares entities",
        ),
        (
            lambda text: text.replace(
                "<feed ", '<!DOCTYPE x [<!ENTITY e SYSTEM "file:///etc/passwd">]><feed '
            ),
            "declares entities",
        ),
        (
            lambda text: text.replace("<content>", "<content>" + "<a>" * 200, 1),
            "more than 100 deep",
        ),
    ],
)
def test_feeds_that_are_none_are_refused_whole(source, change, message) -> None:
    """One clear line each."""
    with pytest.raises(IntakeError, match=message) as raised:
        source(change(one(WH, [1, 2])))
    assert "\n" not in str(raised.value)


def test_a_doctype_fetches_nothing(rows) -> None:
    """A feed that names a DTD is read without it."""
    text = one(WH, [1]).replace(
        "<feed ", '<!DOCTYPE feed SYSTEM "http://127.0.0.1:1/feed.dtd"><feed '
    )
    assert len(rows(text)) == 1


@pytest.mark.parametrize("encoding", ["utf-16", "latin-1"])
def test_feeds_in_other_encodings(rows, encoding) -> None:
    """XML says itself how it is written."""
    text = (
        one(WH, [1])
        .replace("UTF-8", encoding)
        .replace("<title></title>", "<title>Mühle</title>", 1)
    )
    (row,) = rows(text.encode(encoding), '[columns]\nmeter_id = "title"')
    assert row["meter_id"] == "Mühle"


def test_values_that_are_no_numbers_stay_text(rows) -> None:
    """They are refused further on, each with its line."""
    (row,) = rows(
        one(WH, ["1,5"]).replace(
            f"<start>{START}</start></timePeriod>", "<start>now</start></timePeriod>"
        )
    )
    assert (row["kwh"], row["read_at"]) == ("1,5", "now")


# --- Into the store -------------------------------------------------------------------------------


@pytest.fixture
def site(new_utility, made_store, tmp_path):
    """A unit with one meter, M."""
    units, connections = "unit_id,rated_kva,site_id\nT,25,S\n", "meter_id,site_id\nM,S\n"
    return new_utility(tmp_path, made_store(("units", units), ("connections", connections)))


def test_a_feed_goes_into_the_store(site, fates) -> None:
    """Epoch seconds are UTC; an hour's Wh are its mean kW; a second import changes nothing."""
    path = site.file(
        gzip.compress(one(WH, [1000 * hour for hour in range(1, 25)]).encode()), "feed.xml"
    )
    assert fates(site.take("loads", path, power_factor=1)) == (24, 0, 0, 0)
    load = site.site_load("S")
    assert load.index[0] == pd.Timestamp("2025-07-01T00:00Z")
    np.testing.assert_allclose(load, np.arange(1.0, 25.0), rtol=1e-6)
    assert fates(site.take("loads", path, power_factor=1)) == (0, 24, 0, 0)
    assert site.problems() == []


def test_rows_refused_in_the_feed_and_after_it_come_in_order(site, fates) -> None:
    """Each reading has one fate."""
    readings = hours([1, "x", 3, 4])
    readings.insert(1, (START, 86_400, 7))
    readings.append((START + 4 * 3600, 60, 7))
    text = feed(point("M"), meter_reading("M", 1, 7), reading_type(7, WH), block("M", 1, readings))
    report = site.take("loads", site.file(text, "feed.xml"))
    assert fates(report) == (3, 0, 0, 3)
    assert [each.code for each in report.refusals] == [
        "interval.length",
        "value.not_a_number",
        "interval.length",
    ]
    assert [each.line for each in report.refusals] == sorted(each.line for each in report.refusals)
