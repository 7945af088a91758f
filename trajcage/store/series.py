"""A dataset seen only as far as it is valid, read when asked for."""

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import ResultFileError
from trajcage.store.commit import read_text
from trajcage.store.guard import guard

__all__ = ["Series"]

_MOST_PACKED = 1100  # deflate cannot pack better than 1032 to 1


class Series:
    """An array on disk; slicing it or ``np.asarray`` reads.

    Parameters
    ----------
    dataset : h5py.Dataset
        The dataset.
    n_rows : int
        Rows that are valid.
    path : Path
        The file, for messages.
    """

    def __init__(self, dataset: Any, n_rows: int, path: Path) -> None:
        self._dataset = dataset
        self._path = path
        self.dtype: np.dtype[np.generic] = dataset.dtype
        self.description = read_text(dataset.attrs, "description")
        self.unit = read_text(dataset.attrs, "unit")
        meanings = read_text(dataset.attrs, "flag_meanings")
        self.codes: tuple[str, ...] = tuple(meanings.split(" ")) if meanings else ()
        if n_rows > dataset.shape[0]:
            raise ResultFileError(
                f"{path}: {dataset.name} is damaged: {n_rows} rows are marked valid, "
                f"{dataset.shape[0]} are there"
            )
        self.shape: tuple[int, ...] = (n_rows, *dataset.shape[1:])
        self._checked = False

    @property
    def ndim(self) -> int:
        """Number of axes."""
        return len(self.shape)

    @property
    def size(self) -> int:
        """Number of values."""
        return int(np.prod(self.shape, dtype=object))

    def __len__(self) -> int:
        return self.shape[0]

    def __repr__(self) -> str:
        unit = f", unit={self.unit!r}" if self.unit else ""
        return f"<Series {self._dataset.name} {self.shape} {self.dtype}{unit}>"

    def __array__(
        self, dtype: Any = None, copy: bool | None = None
    ) -> NDArray[np.generic]:
        return np.asarray(self[...], dtype=dtype)

    def __getitem__(self, key: Any) -> Any:
        """Read a part; integers, slices and ``...`` read no more than needed."""
        self._check_size()
        keys = key if isinstance(key, tuple) else (key,)
        if not all(isinstance(k, (int, np.integer, slice)) or k is ... for k in keys):
            return self[...][key]
        if sum(k is ... for k in keys) > 1 or len(keys) - (... in keys) > self.ndim:
            raise IndexError(f"too many indices {key!r} for shape {self.shape}")
        if ... not in keys:
            keys = (*keys, ...)
        gap = keys.index(...)
        missing = self.ndim - len(keys) + 1
        keys = (*keys[:gap], *(slice(None),) * missing, *keys[gap + 1 :])
        place: list[int | slice] = []
        turned: list[slice] = []
        for k, length in zip(keys, self.shape, strict=True):
            if not isinstance(k, slice):
                place.append(range(length)[k])
                continue
            chosen = range(*k.indices(length))
            turned.append(slice(None, None, -1 if chosen.step < 0 else 1))
            if len(chosen) == 0:
                place.append(slice(0, 0))
            else:
                low, high = sorted((chosen[0], chosen[-1]))
                place.append(slice(low, high + 1, abs(chosen.step)))
        with guard(self._path, f"reading {self._dataset.name}"):
            block = self._dataset[tuple(place)]
        return block[tuple(turned)] if turned else block

    def _check_size(self) -> None:
        """Refuse to allocate what the file only claims to hold."""
        if self._checked or self.size == 0:
            return
        with guard(self._path, f"reading {self._dataset.name}"):
            stored = self._dataset.id.get_storage_size()
        limit = stored * (1 if self._dataset.compression is None else _MOST_PACKED)
        if self.size * self.dtype.itemsize > limit:
            raise ResultFileError(
                f"{self._path}: {self._dataset.name} is damaged: it claims shape "
                f"{self.shape} but only {stored} bytes are stored"
            )
        self._checked = True
