"""Numbers with an exact expression beside their value."""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

__all__ = ["SMALLEST_VORONOI_CELL", "ExactNumber"]


@dataclass(frozen=True)
class ExactNumber:
    """A number known in closed form.

    Parameters
    ----------
    expression : str
        Closed form in ``pi``, ``sqrt`` and the four operations, such as
        ``"sqrt(2)*pi/6"``.
    value : float
        The same number.
    """

    expression: str
    value: float


#: Smallest Voronoi cell that equal hard particles of diameter 1 can have, by
#: dimension: the regular hexagon around a disk (Fejes Toth 1940) and the regular
#: dodecahedron around a sphere (Hales & McLaughlin 2010, J. Am. Math. Soc. 23, 299).
SMALLEST_VORONOI_CELL: Mapping[int, ExactNumber] = MappingProxyType(
    {
        2: ExactNumber("sqrt(3)/2", math.sqrt(3) / 2),
        3: ExactNumber(
            "5*sqrt(2*(65-29*sqrt(5)))/4",
            # 65 - 29 sqrt(5) = 20 / (65 + 29 sqrt(5)), free of cancellation
            5 * math.sqrt(40 / (65 + 29 * math.sqrt(5))) / 4,
        ),
    }
)
