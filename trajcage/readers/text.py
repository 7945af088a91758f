"""Coordinates written as decimal numbers: columns and their resolution."""

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

__all__ = ["decimal_spacing", "to_floats", "to_integers", "to_names"]


def to_floats(words: NDArray[np.bytes_]) -> NDArray[np.float64]:
    """Parse an array of words as float64; raises ValueError naming the word."""
    try:
        return words.astype(np.float64)
    except ValueError:
        raise ValueError(f"expected a number, found {_culprit(words, float)}") from None


def to_integers(words: NDArray[np.bytes_]) -> NDArray[np.int64]:
    """Parse an array of words as int64; raises ValueError naming the word."""
    try:
        return words.astype(np.int64)
    except ValueError:
        raise ValueError(f"expected an integer, found {_culprit(words, int)}") from None


def to_names(words: NDArray[np.bytes_]) -> list[str]:
    """Decode an array of words, whatever bytes they hold."""
    return [word.decode(errors="replace") for word in words.tolist()]


def _culprit(words: NDArray[np.bytes_], kind: type) -> str:
    for word in words.ravel():
        text = word.decode(errors="replace")
        try:
            kind(text)
        except ValueError:
            return repr(text)
    return "something else"


def decimal_spacing(words: Iterable[bytes]) -> float:
    """Spacing of numbers as printed: the unit of their last digit.

    A fixed number of decimals gives 10^-decimals. A varying number comes from
    significant digits as in C's ``%g``, with trailing zeros lost: then the
    spacing is that of the largest number, at not less than the six digits
    that ``%g`` has by default. One or two decimals count as fixed only when
    the last digits vary, since a lattice printed in full looks like 0.0, 0.5.

    Parameters
    ----------
    words : iterable of bytes
        Numbers as they stand in the file.

    Returns
    -------
    float
        Spacing in the unit of the numbers; 0 if there are none.
    """
    decimals: set[int] = set()
    last_digits: set[bytes] = set()
    digits, largest = 6, 0.0
    for word in words:
        mantissa, _, exponent = word.lower().partition(b"e")
        whole, _, fraction = mantissa.lstrip(b"+-").partition(b".")
        if not (whole + fraction).isdigit():
            continue
        decimals.add(len(fraction) if not exponent else -1)
        last_digits.add(fraction[-1:])
        digits = max(digits, len((whole + fraction).lstrip(b"0")))
        largest = max(largest, abs(float(word)))
    if not decimals:
        return 0.0
    if len(decimals) == 1:
        (count,) = decimals
        printed_in_full = last_digits == {b"5"}  # 0.125, 0.375: exact binary
        if (count >= 3 and not printed_in_full) or (count > 0 and len(last_digits) > 5):
            return max(10.0**-count, float(np.spacing(largest)))
    if largest == 0.0:
        return 0.0
    magnitude = int(np.floor(np.log10(largest)))
    return max(10.0 ** (magnitude + 1 - digits), float(np.spacing(largest)))
