"""Decimal fields of a byte buffer. Oracle: Python's own float(), which rounds correctly."""

import numpy as np
import pytest

from lagscape.recordings.decimals import LONGEST_FIELD, decimals, gather


def laid_out(fields):
    buffer = np.frombuffer(b",".join(fields) + b"\n", dtype=np.uint8)
    lengths = np.array([len(field) for field in fields])
    starts = np.concatenate(([0], np.cumsum(lengths + 1)[:-1]))
    return buffer, starts, lengths


@pytest.mark.parametrize("text", [b"1.5", b" -2.25 ", b"+.5", b"7.", b"0.1", b"-0.000123", b"123456789012345", b"1234567.8901234"])
def test_plain_numbers_are_rounded_as_float_does(text):
    values, plain = decimals(*laid_out([b"0", text]))
    assert plain.all()
    assert values[1] == float(text)  # exactly: one rounding either way


def test_many_random_decimals_are_bit_equal_to_float():
    rng = np.random.default_rng(3)
    fields = [f"{x:.{rng.integers(0, 8)}f}".encode() for x in rng.normal(scale=1e4, size=5000)]
    values, plain = decimals(*laid_out(fields))
    assert plain.all()
    assert values.tolist() == [float(field) for field in fields]


@pytest.mark.parametrize(
    "text", [b"", b" ", b"-", b"+", b".", b"--1", b"- 1", b"1-", b"1 2", b"1. 2", b"1.2.3", b"1e5", b"x", b"nan", b"1234567890123456"]
)
def test_anything_else_is_left_to_the_caller(text):
    values, plain = decimals(*laid_out([text, b"3"]))
    assert plain.tolist() == [False, True]
    assert np.isnan(values[0]) and values[1] == 3.0


def test_a_field_longer_than_the_limit_is_left_to_the_caller():
    _, plain = decimals(*laid_out([b"0" * (LONGEST_FIELD + 1), b"0" * 3]))
    assert plain.tolist() == [False, True]


def test_gathered_fields_are_zero_filled():
    assert gather(*laid_out([b"abc", b"d"])).tolist() == [[97, 98, 99], [100, 0, 0]]
