"""Air temperatures: stations, units, and what no thermometer shows."""

from __future__ import annotations

import numpy as np
import pytest

from tracker.errors import IntakeError


def air(utility, station: str = "") -> list[float]:
    return [round(value, 4) for value in utility.readings(station, "air_temp_c", "station")]


@pytest.mark.parametrize("heading", ["air_temp_c", "Air Temp C", "AIR_TEMP_F"])
def test_celsius_and_fahrenheit(utility, fates, heading) -> None:
    """68 °F are 20 °C, 104 °F are 40 °C."""
    values = ("68", "104") if heading.endswith("F") else ("20", "40")
    report = utility.take(
        "weather",
        f"station_id,read_at,{heading}\nFIELD,2025-07-01T00:00Z,{values[0]}\n"
        f"FIELD,2025-07-01T01:00Z,{values[1]}\n",
    )
    assert fates(report) == (2, 0, 0, 0)
    np.testing.assert_allclose(air(utility, "FIELD"), [20.0, 40.0], atol=1e-4)


def test_the_only_station_needs_no_name(utility, fates) -> None:
    """Contract: station_id is optional when there is one station."""
    text = "read_at,air_temp_c\n2025-07-01T00:00Z,20\n2025-07-01T01:00Z,21\n"
    assert fates(utility.take("weather", text)) == (2, 0, 0, 0)
    assert fates(utility.take("weather", text)) == (0, 2, 0, 0)
    assert air(utility) == [20.0, 21.0]


@pytest.mark.parametrize(
    ("cell", "code"),
    [
        ("71", "value.out_of_range"),
        ("-91", "value.out_of_range"),
        ("999", "value.out_of_range"),
        ("", "value.blank"),
        ("warm", "value.not_a_number"),
        ("nan", "value.not_a_number"),
    ],
)
def test_what_no_thermometer_shows_is_refused(utility, fates, cell, code) -> None:
    """999 is the usual word for a broken sensor."""
    text = (
        "read_at,air_temp_c\n2025-07-01T00:00Z,20\n"
        f"2025-07-01T01:00Z,{cell}\n2025-07-01T02:00Z,-40\n"
    )
    report = utility.take("weather", text, interval=60)
    assert fates(report) == (2, 0, 0, 1)
    assert (report.refusals[0].line, report.refusals[0].code) == (3, code)


def test_headings_are_required(utility) -> None:
    """A loads file given as weather must be told apart."""
    with pytest.raises(IntakeError, match="air_temp_c or air_temp_f"):
        utility.take("weather", "meter_id,read_at,kwh\nM,2025-07-01T00:00Z,1\n")


def test_local_stamps_and_half_hours(utility, fates) -> None:
    """Weather has the same habits of stamping as load."""
    text = "read_at,air_temp_c\n" + "".join(
        f"2025-07-01T{hour:02d}:{minute:02d},{20 + hour}\n"
        for hour in range(3)
        for minute in (0, 30)
    )
    report = utility.take("weather", text, timezone="America/Chicago", stamps="end")
    assert fates(report) == (6, 0, 0, 0)
    held = utility.readings("", "air_temp_c", "station")
    assert f"{held.index[0]:%H:%M}" == "04:30"
