"""Who is near whom: the one door to freud.

freud works in single precision on boxes centered on zero. Here positions are
wrapped, centered and scaled in float64 before they are handed over, freud
proposes pairs, facets and harmonics, and every vector that comes back is
recomputed in float64 from the true lattice vectors.
"""

from trajcage.neighborhood.bond_order import hexatic, steinhardt
from trajcage.neighborhood.clusters import connected_groups
from trajcage.neighborhood.pairs import PairRule, check_distinct, neighbor_list
from trajcage.neighborhood.tessellation import radical_voronoi, tessellate, voronoi
from trajcage.neighborhood.threads import set_threads

__all__ = [
    "PairRule",
    "check_distinct",
    "connected_groups",
    "hexatic",
    "neighbor_list",
    "radical_voronoi",
    "set_threads",
    "steinhardt",
    "tessellate",
    "voronoi",
]
