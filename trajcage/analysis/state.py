"""States of nested parts, flattened to one mapping of arrays."""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

__all__ = ["State", "prefixed", "under"]

#: All that a part of the fold needs to continue, by name.
State = dict[str, NDArray[np.generic]]


def prefixed(name: str, state: Mapping[str, NDArray[np.generic]]) -> State:
    """Put the state of a part under its name."""
    return {f"{name}.{key}": array for key, array in state.items()}


def under(name: str, state: Mapping[str, NDArray[np.generic]]) -> State:
    """Take the state of a part back out."""
    start = f"{name}."
    return {
        key.removeprefix(start): array
        for key, array in state.items()
        if key.startswith(start)
    }
