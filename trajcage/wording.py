"""How numbers, lists and suggestions are written, wherever text is made."""

import difflib
import math
from collections.abc import Iterable, Sequence

__all__ = ["MISSING", "listed", "near_miss", "number", "with_error"]

#: Stands where a number does not exist.
MISSING = "–"


def number(value: float | None, digits: int = 6) -> str:
    """Write a number, `MISSING` for one that does not exist."""
    if value is None or not math.isfinite(value):
        return MISSING
    return f"{value:.{digits}g}"


def with_error(mean: float | None, error: float | None) -> str:
    """Write a mean with its error, to two digits of the error."""
    if mean is None or error is None or not error > 0.0:
        return number(mean)
    decimals = max(0, 1 - math.floor(math.log10(error)))
    if decimals > 9:
        return f"{mean:.6g} ± {error:.1e}"
    return f"{mean:.{decimals}f} ± {error:.{decimals}f}"


def listed(names: Sequence[str]) -> str:
    """Write ``a, b and c``."""
    if len(names) < 2:
        return "".join(names)
    return f"{', '.join(names[:-1])} and {names[-1]}"


def near_miss(name: str, known: Iterable[str]) -> str:
    """Write `` (did you mean b?)`` for a misspelled name, nothing if none is near.

    Parameters
    ----------
    name : str
        What was given.
    known : iterable of str
        Names that exist.
    """
    by_key = {_key(candidate): candidate for candidate in known}
    near = difflib.get_close_matches(_key(name), by_key, n=1)
    if not near:  # a part of a name, such as volume of free_volume
        near = [key for key in by_key if _key(name) and _key(name) in key][:1]
    return f" (did you mean {by_key[near[0]]}?)" if near else ""


def _key(name: str) -> str:
    return name.lower().replace("_", "-")
