"""Boxes as freud takes them, built from true lattice vectors."""

from typing import Any

import freud
import numpy as np
from numpy.typing import NDArray

__all__ = ["freud_box", "lower_triangle"]


def lower_triangle(vectors: NDArray[np.float64]) -> NDArray[np.float64]:
    """Turn a box so that its row vectors form a lower triangle, (d, d) float64.

    The diagonal is positive; a left-handed box is mirrored.
    """
    _, upper = np.linalg.qr(vectors.T)
    return np.asarray(upper.T * np.sign(np.diag(upper)), dtype=np.float64)


def freud_box(triangular: NDArray[np.float64]) -> Any:
    """Box of freud with these lower triangular row vectors, centered on zero."""
    if len(triangular) == 2:
        (lx, _), (x2, ly) = triangular
        return freud.box.Box(lx, ly, 0.0, x2 / ly, 0.0, 0.0, is2D=True)
    (lx, _, _), (x2, ly, _), (x3, y3, lz) = triangular
    return freud.box.Box(lx, ly, lz, x2 / ly, x3 / lz, y3 / lz, is2D=False)
