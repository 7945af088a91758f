"""Identities of connected regions from frame to frame."""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.regions import RegionTable

__all__ = ["RegionTracker"]

_UNLISTED = 255  # in place of a kind, of particles in no region of the table


class RegionTracker:
    """Give regions lasting ids: a fold over frames in order.

    A region inherits the id of the region of its kind in the frame before with
    which it shares most particles. If it splits, the part that shares most
    keeps the id; if regions merge, the id of the largest contribution stays.
    All others get new ids, which are never used again.
    """

    def __init__(self) -> None:
        self._next = 0
        self._particle_ids = np.zeros(0, dtype=np.int64)
        self._region_ids = np.zeros(0, dtype=np.int64)
        self._kinds = np.zeros(0, dtype=np.uint8)

    def update(
        self, particle_ids: NDArray[np.int64], table: RegionTable
    ) -> NDArray[np.int64]:
        """Assign ids to the regions of the next frame.

        Parameters
        ----------
        particle_ids : (n,) int64
            Ids of the frame's particles, in any order; their number may vary.
        table : RegionTable
            The regions of the frame.

        Returns
        -------
        (k,) int64
            Id of each row of the table.
        """
        label = table.label
        listed = label >= 0
        kinds = np.full(len(label), _UNLISTED, dtype=np.uint8)
        kinds[listed] = table.kind[label[listed]]
        if np.array_equal(particle_ids, self._particle_ids):  # no need to look them up
            same = listed & (kinds == self._kinds)
            now, known = label[same], self._region_ids[same]
        else:
            _, here, before = np.intersect1d(
                particle_ids,
                self._particle_ids,
                assume_unique=True,
                return_indices=True,
            )
            same = listed[here] & (kinds[here] == self._kinds[before])
            now, known = label[here[same]], self._region_ids[before[same]]
        # Row and id in one number are sorted faster than pairs are.
        n_ids = max(self._next, 1)
        packed, overlap = np.unique(now * n_ids + known, return_counts=True)
        rows, olds = packed // n_ids, packed % n_ids
        ids = np.full(len(table.kind), -1, dtype=np.int64)
        taken: set[int] = set()
        # Ties go to the older id and the larger region, so the outcome is unique.
        for k in np.lexsort((rows, olds, -overlap)):
            row, old = int(rows[k]), int(olds[k])
            if ids[row] < 0 and old not in taken:
                ids[row] = old
                taken.add(old)
        new = np.flatnonzero(ids < 0)
        ids[new] = self._next + np.arange(len(new))
        self._next += len(new)
        self._particle_ids = particle_ids.copy()
        self._region_ids = np.full(len(label), -1, dtype=np.int64)
        self._region_ids[listed] = ids[label[listed]]
        self._kinds = kinds
        return ids

    def state(self) -> dict[str, NDArray[np.generic]]:
        """Return everything needed to go on later."""
        return {
            "next": np.array(self._next, dtype=np.int64),
            "particle_ids": self._particle_ids.copy(),
            "region_ids": self._region_ids.copy(),
            "kinds": self._kinds.copy(),
        }

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Go on from a saved state."""
        self._next = int(state["next"].item())
        self._particle_ids = np.array(state["particle_ids"], dtype=np.int64)
        self._region_ids = np.array(state["region_ids"], dtype=np.int64)
        self._kinds = np.array(state["kinds"], dtype=np.uint8)
