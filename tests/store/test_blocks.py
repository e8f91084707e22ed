"""Packed blocks: what goes in comes out, and damage does not."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from tracker.errors import StoreError
from tracker.store.blocks import (
    HEADER_BYTES,
    Quality,
    month_of,
    month_start_s,
    pack,
    step_of,
    unpack,
    values_a_month,
)

BLOCK_SHAPES = st.tuples(st.integers(1, 4), st.integers(1, 80))


def one_block() -> bytes:
    values = np.arange(744, dtype=np.float32)[np.newaxis] / 7
    (payload,) = pack(values, np.ones((1, 744), np.uint8), 60)
    return payload


@given(
    shape=BLOCK_SHAPES,
    data=st.data(),
    step_min=st.sampled_from([5, 10, 15, 20, 30, 60]),
)
def test_what_is_packed_is_unpacked(shape, data, step_min) -> None:
    """Every bit must survive: NaN, infinities, negative zero, and all flags."""
    values = data.draw(hnp.arrays(np.float32, shape, elements=st.floats(width=32)))
    flags = data.draw(hnp.arrays(np.uint8, shape))
    payloads = pack(values, flags, step_min)
    assert [step_of(payload) for payload in payloads] == [step_min] * shape[0]
    held_values, held_flags = unpack(payloads)
    assert held_values.tobytes() == values.tobytes()
    np.testing.assert_array_equal(held_flags, flags)


@given(place=st.integers(HEADER_BYTES, HEADER_BYTES + 5 * 744 - 1), bit=st.integers(0, 7))
def test_a_flipped_bit_is_found(place, bit) -> None:
    """A wrong load is worse than none: one bit must not pass."""
    payload = bytearray(one_block())
    payload[place] ^= 1 << bit
    with pytest.raises(StoreError, match="checksum does not hold"):
        unpack([bytes(payload)])


@pytest.mark.parametrize("keep", [0, 1, HEADER_BYTES - 1, HEADER_BYTES, 100, -1, -5])
def test_a_cut_block_is_found(keep) -> None:
    """A file cut by a full disk must be noticed, wherever it was cut."""
    with pytest.raises(StoreError, match="damaged"):
        unpack([one_block()[:keep]])


@pytest.mark.parametrize("version", [0, 2, 255])
def test_a_block_of_another_version_is_found(version) -> None:
    """A later layout read as this one would give nonsense that looks like load."""
    with pytest.raises(StoreError, match=f"block version {version} is unknown"):
        unpack([bytes([version]) + one_block()[1:]])


def test_a_wrong_count_is_found() -> None:
    """The header's count is not covered by the checksum, so it is compared with the length."""
    payload = bytearray(one_block())
    payload[4] ^= 1
    with pytest.raises(StoreError, match="length is not what its header says"):
        unpack([bytes(payload)])


def test_a_damaged_block_among_good_ones_is_found() -> None:
    """Blocks are unpacked many at a time; a bad one must not hide."""
    good = one_block()
    with pytest.raises(StoreError):
        unpack([good, good, good[:-1] + b"\x07", good])


@pytest.mark.parametrize(
    ("month", "step_min", "n"),
    [
        ("2024-02", 60, 29 * 24),
        ("2025-02", 15, 28 * 96),
        ("2025-07", 5, 31 * 288),
        ("1969-12", 60, 744),
    ],
)
def test_a_block_holds_the_whole_month(month, step_min, n) -> None:
    """Leap years and months of any length have their own number of places."""
    number = int(np.datetime64(month, "M").astype(int))
    assert values_a_month(number, step_min) == n
    assert month_of(month_start_s(number)) == number
    assert month_of(month_start_s(number) - 1) == number - 1


def test_quality_flags_are_bits_of_a_byte() -> None:
    """Flags are or-ed over the meters of a site, so each needs a bit of its own."""
    assert [int(flag) for flag in Quality] == [1, 2, 4, 8, 16, 32, 64]
