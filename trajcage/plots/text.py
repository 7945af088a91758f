"""Numbers and sentences as figures and reports write them."""

import math

__all__ = ["listed", "number", "with_error"]


def number(value: float | None, digits: int = 6) -> str:
    """Write a number, an en dash for one that does not exist."""
    if value is None or not math.isfinite(value):
        return "–"
    return f"{value:.{digits}g}"


def with_error(mean: float | None, error: float | None) -> str:
    """Write a mean with its error, to two digits of the error."""
    if mean is None or error is None or not error > 0.0:
        return number(mean)
    decimals = max(0, 1 - math.floor(math.log10(error)))
    if decimals > 9:
        return f"{mean:.6g} ± {error:.1e}"
    return f"{mean:.{decimals}f} ± {error:.{decimals}f}"


def listed(names: list[str]) -> str:
    """Write ``a, b and c``."""
    if len(names) < 2:
        return "".join(names)
    return f"{', '.join(names[:-1])} and {names[-1]}"
