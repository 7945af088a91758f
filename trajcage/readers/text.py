"""Coordinates written as decimal numbers: columns and their resolution."""

from collections.abc import Iterable, Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

__all__ = ["Table", "check_last_line", "decimal_spacing", "to_floats"]


class Table:
    """Rows of words with named columns.

    Parameters
    ----------
    lines : sequence of bytes
        One line a particle.
    columns : mapping of str to int
        Position of each named column.
    width : int
        Words that every line must have at least.

    Raises
    ------
    ValueError
        If a line has fewer words.
    """

    def __init__(
        self, lines: Sequence[bytes], columns: Mapping[str, int], width: int
    ) -> None:
        self.columns = columns
        self.rows = [line.split() for line in lines]
        for i, row in enumerate(self.rows):
            if len(row) < width:
                raise ValueError(
                    f"expected {width} columns, found {len(row)} on line {i + 1} of "
                    "the particles (truncated?)"
                )

    def __len__(self) -> int:
        return len(self.rows)

    def __contains__(self, name: str) -> bool:
        return name in self.columns

    def words(self, name: str) -> list[bytes]:
        """Return one column as it is printed."""
        if name not in self.columns:
            raise ValueError(
                f"expected a column {name} as in the first frame, found "
                f"{' '.join(self.columns)}"
            )
        at = self.columns[name]
        return [row[at] for row in self.rows]

    def names(self, name: str) -> list[str]:
        """Return one column as text, whatever bytes it holds."""
        return [word.decode(errors="replace") for word in self.words(name)]

    def floats(self, *names: str) -> NDArray[np.float64]:
        """Return columns side by side, (n, n_names) float64."""
        return np.array([to_floats(self.words(name)) for name in names]).T

    def integers(self, *names: str) -> NDArray[np.int64]:
        """Return columns side by side, (n, n_names) int64."""
        columns = []
        for name in names:
            words = self.words(name)
            try:
                columns.append(np.array([int(word) for word in words], dtype=np.int64))
            except (ValueError, OverflowError):
                raise ValueError(
                    f"expected an integer, found {_culprit(words, int)}"
                ) from None
        return np.array(columns).T

    def spacing(self, *names: str) -> float:
        """Return the spacing of printed coordinates, see `decimal_spacing`."""
        return decimal_spacing(
            word for name in names for word in self.words(name)[:100_000]
        )


def check_last_line(text: bytes) -> None:
    """Raise ValueError if the text ends inside a line, perhaps inside a number."""
    if not text.endswith(b"\n"):
        raise ValueError(
            "the file ends inside a line (truncated?); end a complete file with a "
            "line break"
        )


def to_floats(words: Sequence[bytes]) -> NDArray[np.float64]:
    """Parse words as float64; raises ValueError quoting the one that is none."""
    try:
        return np.array([float(word) for word in words], dtype=np.float64)
    except ValueError:
        raise ValueError(f"expected a number, found {_culprit(words, float)}") from None


def _culprit(words: Sequence[bytes], kind: type) -> str:
    for word in words:
        text = word.decode(errors="replace")
        try:
            kind(text)
        except ValueError:
            return repr(text)
    return "a number out of range"


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
