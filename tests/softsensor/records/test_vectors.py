"""Vectors as bytes: every bit comes back."""

from __future__ import annotations

import struct

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from softsensor.errors import RecordsError
from softsensor.records.named_arrays import pack_arrays, unpack_arrays
from softsensor.records.vectors import pack, stack, stack_codes, unpack, unpack_codes

BITS = st.integers(min_value=0, max_value=2**64 - 1)


@given(st.lists(BITS, max_size=20))
def test_every_bit_pattern_of_a_float_comes_back(bits: list[int]) -> None:
    vector = np.array(bits, dtype=np.uint64).view(np.float64)
    blob = pack(vector)
    assert blob == struct.pack(f"<{len(bits)}Q", *bits)
    assert unpack(blob).view(np.uint64).tolist() == bits


@given(st.lists(st.integers(min_value=-128, max_value=127), max_size=20))
def test_codes_come_back(codes: list[int]) -> None:
    blob = pack(np.array(codes, dtype=np.int8))
    assert blob == struct.pack(f"{len(codes)}b", *codes)
    assert unpack_codes(blob).tolist() == codes


def test_a_big_endian_or_strided_vector_is_stored_the_same() -> None:
    plain = np.array([1.5, -0.0, np.nan])
    assert pack(plain.astype(">f8")) == pack(plain)
    assert pack(np.repeat(plain, 2)[::2]) == pack(plain)


def test_rows_are_stacked_and_an_empty_width_keeps_its_rows() -> None:
    assert stack([pack(np.array([1.0, 2.0])), pack(np.array([3.0, 4.0]))]).tolist() == [
        [1.0, 2.0],
        [3.0, 4.0],
    ]
    assert stack_codes([b"\x01", b"\x02", b"\xff"]).tolist() == [[1], [2], [-1]]
    assert stack([b"", b"", b""]).shape == (3, 0)
    assert stack_codes([b"", b""]).shape == (2, 0)


def test_what_does_not_fit_is_refused() -> None:
    with pytest.raises(RecordsError, match="float32"):
        pack(np.zeros(2, dtype=np.float32))  # type: ignore[arg-type]
    with pytest.raises(RecordsError, match="damaged"):
        unpack(b"\x00" * 9)
    with pytest.raises(RecordsError, match="differ in length"):
        stack([b"\x00" * 8, b"\x00" * 16])


def test_named_arrays_come_back_with_their_shapes_and_kinds() -> None:
    arrays = {
        "P": np.array([[1.0, -0.0], [np.nan, np.inf]]),
        "count": np.array(7, dtype=np.int64),
        "up": np.zeros((0, 3), dtype=np.int8),
        "on": np.array([True, False]),
    }
    again = unpack_arrays(pack_arrays(arrays))
    assert list(again) == list(arrays)
    for name, array in arrays.items():
        assert again[name].dtype == array.dtype
        assert again[name].shape == array.shape
        assert again[name].tobytes() == array.tobytes()
    assert pack_arrays(again) == pack_arrays(arrays)
    again["P"][0, 0] = 2.0


def test_damaged_named_arrays_are_refused() -> None:
    blob = pack_arrays({"x": np.arange(4.0)})
    for damaged in (
        blob[:-1],
        blob + b"\x00",
        b"OTHER" + blob[5:],
        blob[:20],
        b"",
        blob.replace(b"<f8", b"<O8"),
    ):
        with pytest.raises(RecordsError, match="damaged"):
            unpack_arrays(damaged)
    with pytest.raises(RecordsError, match="cannot be stored"):
        pack_arrays({"x": np.array(["text"])})
