"""`tracker verify`: every check value holds, and one that does not is said and fails the command."""

from __future__ import annotations

import json
import math
from collections import Counter
from collections.abc import Callable

import numpy as np
import pytest

from tracker.cli import main
from tracker.verification import Check, checks, values
from tracker.verification.recomputed import half_last_digit
from tracker.verification.values import PrintedValues

KEYS = ["what", "value", "ours", "difference", "allowed", "held", "source", "holds"]

TABLES = [table for table in vars(values).values() if isinstance(table, PrintedValues)]


@pytest.fixture(scope="module")
def all_checks() -> list[Check]:
    return checks()


@pytest.fixture
def verify(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> Callable[..., tuple[int, str]]:
    """Run the command line `tracker verify …`; return its exit status and what it printed."""

    def run(*words: str) -> tuple[int, str]:
        monkeypatch.setattr("sys.argv", ["tracker", "verify", *words])
        with pytest.raises(SystemExit) as stopped:
            main.run()
        assert isinstance(stopped.value.code, int)
        return stopped.value.code, capsys.readouterr().out

    return run


def test_every_value_holds(all_checks: list[Check]) -> None:
    """Names what is off, if anything is."""
    assert [(check.what, check.value, check.ours) for check in all_checks if not check.holds] == []


@pytest.mark.parametrize("table", TABLES, ids=lambda table: table.source)
def test_every_printed_value_is_compared(table: PrintedValues, all_checks: list[Check]) -> None:
    """A table that nobody computes anew, in whole or in part, would check nothing."""
    compared = [check.value for check in all_checks if check.source == table.source]
    printed = {
        values.PREFERRED_RATINGS: lambda row: [*row[1:], str(len(row) - 1)],
        values.EXPONENTS: lambda row: row[1:],
        values.CHARACTERISTICS: lambda row: row[2:],
        values.STEADY_STATE: lambda row: row[1:],
        values.STEP_CORRECTED: lambda row: row[1:],
        values.STEP_RATED: lambda row: row[1:],
    }.get(table, lambda row: row[-1:])
    forms = 2 if table in (values.STEADY_STATE, values.STEP_CORRECTED, values.STEP_RATED) else 1
    wanted = [cell for row in table.rows() for cell in printed(row)] * forms
    assert Counter(compared) == Counter(wanted)
    assert {check.held for check in all_checks if check.source == table.source} == {table.held}


def test_tables_are_told_apart_by_their_source() -> None:
    """The terminal groups values by source, and the test above counts on it."""
    sources = [table.source for table in TABLES]
    assert len(TABLES) > 15
    assert len(set(sources)) == len(sources)


@pytest.mark.parametrize(
    ("printed", "half"),
    [
        ("0.0028", 5e-5),
        ("110", 0.5),
        ("50 100", 0.5),
        ("9.80e-18", 5e-21),
        ("4.8", 0.05),
        ("1e3", 500.0),
    ],
)
def test_half_of_the_last_printed_digit(printed: str, half: float) -> None:
    """What is allowed follows from the print, thousands parted or not."""
    assert half_last_digit(printed) == pytest.approx(half, rel=1e-12)


def test_no_computed_value_is_held_to_less_than_its_print(all_checks: list[Check]) -> None:
    """Only the printed table of F_AA has an allowance of its own, 1e-4 of the value."""
    for check in all_checks:
        rtol = 1e-4 if check.source == values.AGING_FACTOR_110.source else 0.0
        most = max(half_last_digit(check.value), rtol * float(check.value.replace(" ", "")))
        assert check.allowed <= most * (1 + 1e-12), check.what


def test_a_value_that_is_no_number_does_not_hold() -> None:
    """NaN compares False with everything; it must not slip through."""
    assert not Check("x", "1.0", math.nan, 0.05, "computed", "here").holds


def test_hot_spot_allowances_add_up() -> None:
    """110 and 95 are the sums that their sources make of them."""
    for table in (values.REFERENCE_65, values.REFERENCE_55):
        *parts, total = (float(cell) for cell in table.rows()[0])
        assert sum(parts) == total


def test_command_says_that_all_hold(verify: Callable[..., tuple[int, str]]) -> None:
    """Exit status 0, the figures under their source and how it is held."""
    status, text = verify()
    assert status == 0
    assert "IEEE C57.91 clause 5, aging acceleration factor, reference 110 °C (from memory)" in text
    assert "  424.9200       424.923    +3.0e-03     4e-02  F_AA at 180 °C\n" in text
    count = len(checks())
    assert text.endswith(f"{count} of {count} values hold.\n")
    assert ": OFF" not in text


def test_json_of_the_command(verify: Callable[..., tuple[int, str]]) -> None:
    """Scripts read the printed text, the figures and the verdict, under these names."""
    status, text = verify("--json")
    rows = json.loads(text)
    assert status == 0
    assert len(rows) == len(checks())
    for row in rows:
        assert list(row) == KEYS
        assert isinstance(row["value"], str)
        assert row["holds"] is True
        ours = row["ours"] - float(row["value"].replace(" ", ""))
        assert row["difference"] == pytest.approx(ours, abs=1e-12)
        assert row["held"] in ("seen", "from memory", "computed", "common practice")


@pytest.mark.parametrize(
    ("name", "broken", "off"),
    [
        (
            "aging_acceleration_factor",
            lambda hot_spot_c, reference_c: np.exp(
                15_000 / (reference_c + 273.15) - 15_000 / (hot_spot_c + 273.15)
            ),
            "F_AA at 130 °C",
        ),
        (
            "loss_of_life_pct",
            lambda hours, life_h: 100 * hours / (life_h * 1.01),
            "a day of 65 000",
        ),
        (
            "corrected_time_constant",
            lambda _goal, _start, _rated, rated_h, _exponent: rated_h,
            "τ from K 0.5 to 1.5",
        ),
        ("DEFAULT_HOT_SPOT_LIMIT_C", 150.0, "default hot-spot limit"),
        ("ARRHENIUS_SLOPE_K", 14_999.0, "B, K"),
        ("PREFERRED_RATINGS_KVA", {1: (5.0, 10.0), 3: (15.0,)}, "1-phase, size 12"),
        ("thermal_capacity_wh_per_k", lambda core, tank, oil: core + tank + oil, "oil, 1 L"),
    ],
)
def test_a_broken_formula_fails_the_command(
    name: str,
    broken: object,
    off: str,
    monkeypatch: pytest.MonkeyPatch,
    verify: Callable[..., tuple[int, str]],
) -> None:
    """Exit status 1, and the value that is off said at the end."""
    monkeypatch.setattr(f"tracker.verification.recomputed.{name}", broken)
    status, text = verify()
    assert status == 1
    tail = text.partition("values hold.\n")[2]
    assert off in tail
    assert ": OFF (" in tail


@pytest.mark.parametrize("form", ["simulate", "assess_fleet"])
def test_a_broken_form_of_the_model_fails_the_command(
    form: str, monkeypatch: pytest.MonkeyPatch, verify: Callable[..., tuple[int, str]]
) -> None:
    """The readable form and the fleet kernel are each held to the tables by themselves."""
    from tracker.verification import recomputed

    right = getattr(recomputed, form)

    def warmer(load_kva: object, air_temp_c: object, *words: object, **options: object) -> object:
        return right(load_kva, np.asarray(air_temp_c) + np.float32(0.02), *words, **options)

    monkeypatch.setattr(recomputed, form, warmer)
    status, text = verify("--json")
    wrong = [row["what"] for row in json.loads(text) if not row["holds"]]
    assert status == 1
    shown, other = ("formulas", "fleet kernel")[:: 1 if form == "simulate" else -1]
    assert any(f"({shown})" in what for what in wrong)
    assert not any(f"({other})" in what for what in wrong)
