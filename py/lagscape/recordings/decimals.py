"""Decimal numbers out of a byte buffer, many at a time, correctly rounded.

A mantissa below 2^53 divided by a power of ten up to 10^22 rounds once and is therefore the nearest double
(Clinger 1990, Proc. PLDI, 92-101); everything else is left to the caller.
"""

import numpy as np

__all__ = ["LONGEST_FIELD", "decimals", "gather"]

LONGEST_FIELD = 64
_MOST_DIGITS = 15
_POWERS = 10.0 ** np.arange(_MOST_DIGITS + 1)


def gather(buffer: np.ndarray, starts: np.ndarray, lengths: np.ndarray) -> np.ndarray:
    """Fields as rows of bytes, zero-filled: shape (n, longest length, at most 64)."""
    width = int(min(max(lengths.max(initial=1), 1), LONGEST_FIELD))
    column = np.arange(width)
    index = np.minimum(starts[:, None] + column, buffer.size - 1)
    return np.where(column < lengths[:, None], buffer[index], np.uint8(0))


def decimals(buffer: np.ndarray, starts: np.ndarray, lengths: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Numbers of the plain form [sign] digits [. digits], blanks around them allowed.

    Parameters
    ----------
    buffer : uint8 array, shape (n_bytes,)
    starts, lengths : int arrays, shape (n,)
        Where each field lies.

    Returns
    -------
    values : float64 array, shape (n,)
        nan where the field is not of that form.
    plain : bool array, shape (n,)
        True where it is.
    """
    n = starts.size
    mantissa = np.zeros(n, dtype=np.int64)
    n_digits = np.zeros(n, dtype=np.int8)
    n_decimals = np.zeros(n, dtype=np.int8)
    # 0 before the number, 1 after a sign, 2 in the whole digits, 3 after the point, 4 in blanks behind
    state = np.zeros(n, dtype=np.int8)
    negative = np.zeros(n, dtype=bool)
    plain = lengths <= LONGEST_FIELD
    last = buffer.size - 1
    for position in range(int(min(lengths.max(initial=0), LONGEST_FIELD))):
        inside = position < lengths
        byte = np.where(inside, buffer[np.minimum(starts + position, last)], np.uint8(32))
        digit = byte - np.uint8(48)
        is_digit = digit < 10
        is_point = byte == 46
        is_blank = byte == 32
        if not (is_digit.all() or (is_digit | is_point).all()):
            is_sign = (byte == 45) | (byte == 43)
            negative |= byte == 45
            plain &= is_digit | is_point | is_blank | (is_sign & (state == 0))
            state = np.where(is_sign, np.int8(1), state)
        plain &= ~(is_digit & (state == 4)) & ~(is_point & (state >= 3)) & ~(is_blank & (state == 1))
        mantissa = np.where(is_digit, mantissa * 10 + digit, mantissa)
        n_digits += is_digit
        n_decimals += is_digit & (state == 3)
        state = np.where(is_point, np.int8(3), state)
        state = np.where(is_digit & (state < 2), np.int8(2), state)
        state = np.where(is_blank & (state >= 2), np.int8(4), state)
    plain &= (n_digits > 0) & (n_digits <= _MOST_DIGITS)
    values = mantissa / _POWERS[np.minimum(n_decimals, _MOST_DIGITS)]
    values[negative] *= -1.0
    values[~plain] = np.nan
    return values, plain
