"""Ideal-lattice references against closed forms and independent computations.

Provenance of the reference digits, where no published source is named:

- "arbitrary precision": first-shell integrals done beforehand with mpmath and, on
  their own, as sums over the facets of the limiting polytope; both agree.
- "grid": two voxel grids with flood fill, relative error about 1e-3.
- Close packings are textbook values (Conway & Sloane, Sphere Packings).
"""

import math
import re
from itertools import pairwise

import numpy as np
import pytest
import shapely
from scipy.spatial import ConvexHull, Voronoi

from trajcage.errors import UsageError
from trajcage.lattices import (
    LATTICES,
    SMALLEST_VORONOI_CELL,
    lattice,
    lattice_sites,
    thresholds,
)
from trajcage.model import CageStatus

# Close packing, nearest neighbors, C and c1 (derived; computed to 12 digits).
LIMITS = {
    "square": (0.785398163397, 4, 4, 1 / 3),
    "triangular": (0.906899682117, 6, 3.464101615138, 1 / 9),
    "honeycomb": (0.604599788078, 3, 5.196152422707, 1),
    "sc": (0.523598775598, 6, 8, 1),
    "bcc": (0.680174761588, 8, 6.928203230276, 3 / 4),
    "fcc": (0.740480489693, 12, 5.656854249492, 3 / 8),
    "hcp": (0.740480489693, 12, 5.656854249492, 3 / 8),
    "diamond": (0.340087380794, 4, 13.856406460551, 3),
}

# Lowest packing fraction and bounding neighbors of each stage of the cage: exact
# paths of largest clearance on the Voronoi network of the vacated lattice.
STAGES = {
    "square": [(0.392699081699, 4), (0.196349540849, 8)],
    "triangular": [(0.226724920529, 6)],
    "honeycomb": [(0.453449841059, 3), (0.151149947020, 12)],
    "sc": [(0.285011073369, 6), (0.185120122423, 26)],
    "bcc": [(0.441786466911, 8), (0.156195103295, 14)],
    "fcc": [(0.261799387799, 12), (0.142505536685, 18)],
    "hcp": [(0.261799387799, 12), (0.142505536685, 18)],
    "diamond": [(0.285011073369, 4)],
}

# name, phi, sigma/a, v_f/a^d, s_f/a^(d-1): arbitrary precision.
SIZES = [
    ("square", 0.25, 0.564189583548, 1.18109193761, 6.28675789966),
    ("square", 0.30, 0.618038723237, 0.866914944236, 5.43644829251),
    ("square", 0.50, 0.797884560803, 0.18109193761, 1.93878086789),
    ("square", 0.70, 0.944069743883, 0.0127717062306, 0.461846633808),
    ("triangular", 0.30, 0.575149839, 0.692870835646, 3.65977396354),
    ("triangular", 0.50, 0.7425152493, 0.239457835767, 1.91730848652),
    ("triangular", 0.70, 0.8785558910, 0.0519048908173, 0.862720373443),
    ("triangular", 0.72, 0.8910182991, 0.0417206105265, 0.771792527543),
    ("triangular", 0.90, 0.9961887430, 5.03398407407e-5, 0.026422042803),
    ("honeycomb", 0.50, 0.9093917435, 0.0483669263694, 1.16509844485),
    ("sc", 0.30, 0.830566118415, 0.0508493862321, 1.04134751252),
    ("sc", 0.40, 0.914156299468, 0.00561246729237, 0.204373710514),
    ("sc", 0.50, 0.984745021843, 2.885020861e-5, 0.00570421446949),
    ("bcc", 0.45, 0.871359425997, 0.0167861197409, 0.414858874011),
    ("bcc", 0.60, 0.959055144094, 0.000491647806152, 0.0364553630025),
    ("fcc", 0.27, 0.714414150350, 0.159360041287, 1.88987088255),
    ("fcc", 0.30, 0.739950290227, 0.116688984139, 1.47186851199),
    ("fcc", 0.40, 0.814420675376, 0.0397564010623, 0.670949665408),
    ("fcc", 0.494, 0.873784714080, 0.0120484553763, 0.29311173348),
    ("fcc", 0.545, 0.902874998981, 0.00540609388811, 0.169709708934),
    ("fcc", 0.58, 0.921803015441, 0.00279539856915, 0.108568290334),
    ("fcc", 0.64, 0.952552200467, 0.000615880204519, 0.0392053652799),
    ("fcc", 0.70, 0.981434845271, 3.64564122313e-5, 0.00590550529804),
    ("fcc", 0.74, 0.999783656844, 5.728484168e-11, 7.943823059e-7),
    ("diamond", 0.31, 0.969595055555, 0.000433186051886, 0.0445366999169),
]

# The same cages in units of the diameter, v_f/sigma^d and s_f/sigma^(d-1).
SIZES_IN_DIAMETERS = [
    ("square", 0.50, 0.28445855041, 2.42990147089),
    ("square", 0.70, 0.0143298208814, 0.489208172172),
    ("triangular", 0.30, 2.09454780198, 6.3631661102),
    ("triangular", 0.50, 0.434328470276, 2.58218061968),
    ("triangular", 0.70, 0.067246469975, 0.981975514924),
    ("triangular", 0.72, 0.0525505672558, 0.866191556655),
    ("triangular", 0.90, 5.07257617395e-5, 0.026523129264),
    ("honeycomb", 0.50, 0.0584852668658, 1.28118432259),
    ("sc", 0.30, 0.0887489212369, 1.5095491653),
    ("sc", 0.40, 0.00734670250592, 0.244559263134),
    ("sc", 0.50, 3.02118678079e-5, 0.00588231473601),
    ("bcc", 0.45, 0.025372211095, 0.546393742661),
    ("bcc", 0.60, 0.000557344048892, 0.0396345807689),
    ("fcc", 0.27, 0.437048153369, 3.70281520005),
    ("fcc", 0.30, 0.28801972039, 2.68821453349),
    ("fcc", 0.40, 0.0735970983176, 1.01156165864),
    ("fcc", 0.494, 0.0180600124232, 0.383905485861),
    ("fcc", 0.545, 0.00734515054972, 0.208185958267),
    ("fcc", 0.58, 0.00356885879546, 0.127769368981),
    ("fcc", 0.64, 0.000712573867867, 0.0432083751858),
    ("fcc", 0.70, 3.85646599736e-5, 0.00613103953886),
    ("fcc", 0.74, 5.732203733e-11, 7.947261358e-7),
    ("diamond", 0.31, 0.000475229386394, 0.0473736938613),
]


# Volume of a particle of diameter 1.
UNIT_BALL = {2: math.pi / 4, 3: math.pi / 6}


def evaluate(expression):
    assert re.fullmatch(r"[0-9a-z()*/+\-]+", expression)
    return eval(expression, {"pi": math.pi, "sqrt": math.sqrt})


def sizes_per_spacing(name, phi):
    found = lattice(name, phi)
    d = found.dimensions
    return (
        found.free_volume / found.spacing**d,
        found.free_surface / found.spacing ** (d - 1),
    )


def phi_at(name, diameter):
    """Packing fraction at a diameter in nearest-neighbor distances."""
    entry = LATTICES[name]
    return entry.close_packing.value * diameter**entry.dimensions


# ---------------------------------------------------------------- exact numbers


@pytest.mark.parametrize("name", LATTICES)
def test_thresholds_are_the_derived_numbers(name):
    found = thresholds(name)
    close_packing, neighbors, factor, slope = LIMITS[name]
    assert found.name == name
    assert found.close_packing.value == pytest.approx(close_packing, abs=1e-12)
    assert found.volume_factor.value == pytest.approx(factor, abs=1e-12)
    assert found.volume_slope.value == pytest.approx(slope, abs=1e-12)
    stages = STAGES[name]
    assert found.escape.value == pytest.approx(stages[-1][0], abs=1e-12)
    if len(stages) > 1:
        assert found.growth.value == pytest.approx(stages[0][0], abs=1e-12)
    else:
        assert found.growth is None
    for (limit, bounding), stage in zip(stages, LATTICES[name].stages, strict=True):
        assert stage.lower_limit.value == pytest.approx(limit, abs=1e-12)
        assert stage.bounding_neighbors == bounding
        assert phi_at(name, stage.spacing_ratio) == pytest.approx(limit, abs=1e-12)
    assert stages[0][1] == neighbors


@pytest.mark.parametrize("name", LATTICES)
def test_expressions_evaluate_to_their_values(name):
    entry = LATTICES[name]
    numbers = [entry.close_packing, entry.volume_factor, entry.volume_slope]
    numbers += [stage.lower_limit for stage in entry.stages]
    for number in numbers:
        assert evaluate(number.expression) == pytest.approx(number.value, rel=1e-15)


def test_smallest_voronoi_cells():
    # Regular hexagon and dodecahedron of inradius 1/2. The dodecahedron's volume is
    # a computed value; Hales & McLaughlin 2010 proved that it is the smallest cell.
    assert SMALLEST_VORONOI_CELL[3].value == pytest.approx(0.693786378564, abs=1e-12)
    assert math.pi / 6 / SMALLEST_VORONOI_CELL[3].value == pytest.approx(
        0.754697399337, abs=1e-12
    )
    for number in SMALLEST_VORONOI_CELL.values():
        assert evaluate(number.expression) == pytest.approx(number.value, rel=1e-13)
    for entry in LATTICES.values():  # no lattice packs below it
        cell = lattice(entry.name, entry.close_packing.value).cell_volume
        assert cell >= SMALLEST_VORONOI_CELL[entry.dimensions].value * (1 - 1e-15)


def test_smallest_cell_in_space_is_a_dodecahedron():
    # scipy's Voronoi cell of a center with 12 neighbors at icosahedral directions
    golden = (1 + math.sqrt(5)) / 2
    corners = [(0, a, b * golden) for a in (-1, 1) for b in (-1, 1)]
    corners = np.array([np.roll(c, k) for c in corners for k in range(3)])
    corners = corners / np.linalg.norm(corners[0])
    cell = Voronoi(np.vstack([np.zeros(3), corners, 3 * corners]))
    region = cell.vertices[cell.regions[cell.point_region[0]]]
    faces = sum(0 in pair for pair in cell.ridge_points)
    hull_volume = ConvexHull(region).volume
    assert faces == 12
    assert hull_volume == pytest.approx(SMALLEST_VORONOI_CELL[3].value, rel=1e-12)


# ------------------------------------------------------------------------ sizes


@pytest.mark.parametrize(("name", "phi", "diameter", "volume", "surface"), SIZES)
def test_cage_sizes(name, phi, diameter, volume, surface):
    found = lattice(name, phi)
    assert found.status is CageStatus.CLOSED
    assert 1 / found.spacing == pytest.approx(diameter, rel=1e-10)
    per_spacing = sizes_per_spacing(name, phi)
    # ten digits are printed for the two smallest cages, twelve for the others
    digits = 3e-10 if volume < 1e-10 or volume == 2.885020861e-5 else 1e-11
    assert per_spacing[0] == pytest.approx(volume, rel=digits)
    assert per_spacing[1] == pytest.approx(surface, rel=digits)
    assert found.wall_sum == found.free_surface
    assert found.cell_volume == pytest.approx(
        UNIT_BALL[LATTICES[name].dimensions] / phi
    )


@pytest.mark.parametrize(("name", "phi", "volume", "surface"), SIZES_IN_DIAMETERS)
def test_cage_sizes_in_diameters(name, phi, volume, surface):
    found = lattice(name, phi)
    assert found.free_volume == pytest.approx(volume, rel=3e-10)
    assert found.free_surface == pytest.approx(surface, rel=3e-10)


def test_face_centered_and_hexagonal_cages_have_equal_size():
    # Their polytopes differ (rhombic and trapezo-rhombic); the cages are the same
    # halves, one mirrored.
    for phi in np.append(np.linspace(0.262, 0.74, 13), 0.7404804):
        assert lattice("hcp", phi).free_volume == pytest.approx(
            lattice("fcc", phi).free_volume, rel=1e-12
        )
        assert lattice("hcp", phi).free_surface == pytest.approx(
            lattice("fcc", phi).free_surface, rel=1e-12
        )


@pytest.mark.parametrize("name", LATTICES)
def test_limit_of_close_packing(name):
    # v_f -> C delta^d (1 + c1 delta), s_f = -dv_f/dsigma, both derived by hand. Also
    # where the gap is 1e-9: no digit may be lost to cancellation.
    _, _, factor, slope = LIMITS[name]
    d = LATTICES[name].dimensions
    for gap in (1e-3, 1e-6, 1e-9):
        phi = phi_at(name, 1 - gap)
        # the gap that this rounded packing fraction stands for
        below = (LATTICES[name].close_packing.value - phi) / phi_at(name, 1.0)
        rounded = -math.expm1(math.log1p(-below) / d)
        volume, surface = sizes_per_spacing(name, phi)
        assert volume / rounded**d == pytest.approx(
            factor * (1 + slope * rounded), rel=60 * rounded**2 + 1e-12
        )
        assert surface / rounded ** (d - 1) == pytest.approx(
            d * factor * (1 + slope * (d + 1) / d * rounded),
            rel=60 * rounded**2 + 1e-12,
        )


@pytest.mark.parametrize("name", LATTICES)
def test_close_packing_leaves_no_room(name):
    found = lattice(name, LATTICES[name].close_packing.value)
    assert found.status is CageStatus.CLOSED
    assert (found.free_volume, found.free_surface, found.spacing) == (0, 0, 1)
    assert found.compressibility_factor == math.inf


def test_square_cage_grows_without_a_jump():
    # At pi/8 both closed forms give 2 - pi/2 and sqrt(2) pi.
    for shift in (0, -1e-9):
        volume, surface = sizes_per_spacing("square", math.pi / 8 + shift)
        assert volume == pytest.approx(2 - math.pi / 2, abs=1e-7)
        assert surface == pytest.approx(math.sqrt(2) * math.pi, abs=3e-4)
    assert lattice("square", math.pi / 8).bounding_neighbors == 4
    assert lattice("square", math.pi / 8 - 1e-9).bounding_neighbors == 8


FIRST_STAGE_AND_PLANE = [
    (name, diameter)
    for name, diameters in {
        "square": (0.52, 0.6, 0.8, 0.99),
        "triangular": (0.51, 0.7, 0.99),
        "honeycomb": (0.51, 0.7, 0.85, 0.9, 0.99),
        "sc": (0.83, 0.9, 0.99),
        "bcc": (0.88, 0.99),
        "fcc": (0.72, 0.9, 0.99),
        "hcp": (0.72, 0.9, 0.99),
        "diamond": (0.95, 0.99),
    }.items()
    for diameter in diameters
]


@pytest.mark.parametrize(("name", "diameter"), FIRST_STAGE_AND_PLANE)
def test_derivatives_of_the_free_volume(name, diameter):
    # dv_f/dsigma = -s_f at fixed spacing and a dv_f/da = d v_f + sigma s_f at fixed
    # diameter hold for any cage (derived; they follow from the wall's displacement).
    entry = LATTICES[name]
    d, step = entry.dimensions, 1e-4 * (1 - diameter)

    def volume(s):
        return sizes_per_spacing(name, phi_at(name, s))[0]

    slope = (
        8 * (volume(diameter + step) - volume(diameter - step))
        - (volume(diameter + 2 * step) - volume(diameter - 2 * step))
    ) / (12 * step)
    surface = sizes_per_spacing(name, phi_at(name, diameter))[1]
    assert -slope == pytest.approx(surface, rel=3e-8)

    def volume_in_diameters(a):
        return lattice(name, phi_at(name, 1 / a)).free_volume

    a = 1 / diameter
    found = lattice(name, phi_at(name, diameter))
    growth = (volume_in_diameters(a + step) - volume_in_diameters(a - step)) / (
        2 * step
    )
    assert a * growth == pytest.approx(
        d * found.free_volume + found.free_surface, rel=1e-6
    )
    # cell theory is P = kT d(ln v_f)/d(volume per particle)
    assert found.compressibility_factor == pytest.approx(
        a * growth / (d * found.free_volume), rel=1e-6
    )


@pytest.mark.parametrize(
    ("name", "phi"),
    [
        *[("square", phi) for phi in (0.19, 0.2, 0.3, 0.39, 0.4, 0.7)],
        *[("triangular", phi) for phi in (0.22, 0.23, 0.5, 0.85)],
        *[("honeycomb", phi) for phi in (0.15, 0.155, 0.3, 0.45, 0.455, 0.58)],
    ],
)
def test_plane_cages_against_polygons(name, phi):
    # shapely: the piece of the block outside all disks that holds the vacated site
    found = lattice(name, phi)
    repeats = tuple(math.ceil(8 / edge) for edge in LATTICES[name].cell)
    sites, vectors = lattice_sites(name, repeats, found.spacing)
    center = sites[np.argmin(np.linalg.norm(sites - np.diag(vectors) / 2, axis=1))]
    others = sites[np.linalg.norm(sites - center, axis=1) > 1e-9]
    disks = shapely.union_all(
        shapely.buffer(shapely.points(others), 1.0, quad_segs=400)
    )
    block = shapely.box(0, 0, *(np.diag(vectors) - found.spacing / 2))
    pieces = shapely.get_parts(block.difference(disks))
    (cage,) = pieces[shapely.contains_xy(pieces, *center)]
    touches_edge = cage.distance(block.exterior) < 1e-9
    assert touches_edge == (found.status is CageStatus.OPEN)
    if found.status is CageStatus.CLOSED:
        assert found.free_volume == pytest.approx(cage.area, rel=2e-4)
        assert found.free_surface == pytest.approx(cage.length, rel=2e-4)
        wall = shapely.distance(shapely.points(others), cage)
        assert found.bounding_neighbors == np.sum(wall < 1 + 1e-3)


# ---------------------------------------------------------------------- windows


def vacated_network(name):
    """Voronoi vertices around a vacated site: clearances, and windows between them.

    A window is a facet of the Delaunay complex, so an edge of the Voronoi diagram.
    Yields the vertex nearest the site (its center), vertices' clearances, and for
    each edge its ends, least clearance and the circumradius of its corners.
    """
    repeats = tuple(math.ceil(7 / edge) for edge in LATTICES[name].cell)
    sites, vectors = lattice_sites(name, repeats, 1.0)
    center = sites[np.argmin(np.linalg.norm(sites - np.diag(vectors) / 2, axis=1))]
    sites = sites - center
    others = sites[np.linalg.norm(sites, axis=1) > 1e-9]
    voronoi = Voronoi(others)
    keep = np.linalg.norm(voronoi.vertices, axis=1) < 2.5
    _, first, label = np.unique(
        np.round(voronoi.vertices, 6) + 0.0,
        axis=0,
        return_index=True,
        return_inverse=True,
    )
    merged = voronoi.vertices[first]
    label = label.ravel()
    edges = set()
    for ridge in voronoi.ridge_vertices:
        ends = ridge if len(ridge) == 2 else [*ridge, ridge[0]]
        for one, two in pairwise(ends):
            if one >= 0 and two >= 0 and (keep[one] or keep[two]):
                pair = tuple(sorted((label[one], label[two])))
                if pair[0] != pair[1]:
                    edges.add(pair)
    found = []
    for one, two in edges:
        distances = [np.linalg.norm(others - merged[end], axis=1) for end in (one, two)]
        shared = others[
            (distances[0] < distances[0].min() + 1e-5)
            & (distances[1] < distances[1].min() + 1e-5)
        ]
        line = merged[two] - merged[one]
        fraction = (shared[0] - merged[one]) @ line / (line @ line)
        foot = merged[one] + fraction * line
        nearest = merged[one] + min(max(fraction, 0), 1) * line
        found.append(
            (
                one,
                two,
                np.linalg.norm(shared[0] - nearest),
                np.linalg.norm(shared[0] - foot),
                len(shared),
            )
        )
    start = np.argmin(np.linalg.norm(merged, axis=1))
    return start, merged, found


@pytest.mark.parametrize("name", LATTICES)
def test_windows_against_the_voronoi_network(name):
    # scipy's Voronoi diagram of the lattice without the site, flooded from the site
    entry = LATTICES[name]
    start, vertices, network = vacated_network(name)
    upper = 1.0
    for stage in entry.stages:
        diameter = (upper + stage.spacing_ratio) / 2
        upper = stage.spacing_ratio
        flooded, grew = {start}, True
        while grew:
            grew = False
            for one, two, least, _, _ in network:
                if least > diameter and (one in flooded) != (two in flooded):
                    flooded |= {one, two}
                    grew = True
        assert np.linalg.norm(vertices[list(flooded)], axis=1).max() < 1.5
        shut = {}
        for one, two, least, circumradius, corners in network:
            if least <= diameter and (one in flooded or two in flooded):
                key = (corners, round(float(circumradius), 5))
                shut[key] = shut.get(key, 0) + 1
        expected = {}
        for window in stage.windows:
            key = (window.corners, round(window.circumradius, 5))
            expected[key] = expected.get(key, 0) + window.multiplicity
        assert shut == expected


@pytest.mark.parametrize("name", LATTICES)
def test_open_below_the_escape_threshold(name):
    found = lattice(name, thresholds(name).escape.value * 0.999)
    assert found.status is CageStatus.OPEN
    assert found.bounding_neighbors == 0
    for value in (
        found.free_volume,
        found.free_surface,
        found.wall_sum,
        found.weakest_window,
        found.compressibility_factor,
    ):
        assert math.isnan(value)
    assert max(window.opening_ratio for window in found.windows) > 1
    assert found.cell_volume > 0


def test_exactly_at_the_thresholds_the_windows_are_shut():
    for name, entry in LATTICES.items():
        for stage in entry.stages:
            if entry.dimensions == 3 and stage is not entry.stages[0]:
                continue
            found = lattice(name, stage.lower_limit.value)
            assert found.bounding_neighbors == stage.bounding_neighbors
            assert found.free_volume > 0
            assert all(window.opening_ratio <= 1 for window in found.windows)


# ------------------------------------------------------------------------ sites


@pytest.mark.parametrize("name", LATTICES)
def test_sites_have_the_shells_of_the_lattice(name):
    # Neighbors at the first distances, textbook coordination numbers
    shells = {
        "square": [(1, 4), (2**0.5, 4)],
        "triangular": [(1, 6), (3**0.5, 6)],
        "honeycomb": [(1, 3), (3**0.5, 6), (2, 3)],
        "sc": [(1, 6), (2**0.5, 12), (3**0.5, 8)],
        "bcc": [(1, 8), (2 / 3**0.5, 6), (math.sqrt(8 / 3), 12)],
        "fcc": [(1, 12), (2**0.5, 6), (3**0.5, 24)],
        "hcp": [(1, 12), (2**0.5, 6), (math.sqrt(8 / 3), 2), (3**0.5, 18)],
        "diamond": [(1, 4), (math.sqrt(8 / 3), 12), (math.sqrt(11 / 3), 12)],
    }[name]
    sites, vectors = lattice_sites(name, 4, 1.5)
    lengths = np.diag(vectors)
    assert np.array_equal(vectors, np.diag(lengths))
    assert np.array_equal(sites[0], np.zeros(len(lengths)))
    density = len(sites) / np.prod(lengths / 1.5)
    assert density * UNIT_BALL[len(lengths)] == pytest.approx(
        LATTICES[name].close_packing.value, rel=1e-14
    )
    for site in sites[:: max(1, len(sites) // 9)]:
        apart = sites - site
        apart -= lengths * np.rint(apart / lengths)
        distances = np.linalg.norm(apart, axis=1) / 1.5
        for distance, count in shells:
            assert np.sum(np.abs(distances - distance) < 1e-9) == count
        below = np.sum(distances < shells[-1][0] + 1e-9)
        assert below == 1 + sum(count for _, count in shells)


def test_sites_of_a_block_with_unequal_edges():
    sites, vectors = lattice_sites("hcp", (2, 1, 3), 1.0)
    assert sites.shape == (24, 3)
    assert np.diag(vectors) == pytest.approx([2, 3**0.5, 3 * math.sqrt(8 / 3)])


# -------------------------------------------------------------------- bad input


@pytest.mark.parametrize(
    ("name", "suggestion"), [("fc", "fcc"), ("hexagonal", ""), ("dimond", "diamond")]
)
def test_unknown_lattice(name, suggestion):
    for call in (lambda: lattice(name, 0.5), lambda: thresholds(name)):
        with pytest.raises(UsageError) as caught:
            call()
        message = str(caught.value)
        assert repr(name) in message
        assert all(known in message for known in LATTICES)
        assert (f"did you mean {suggestion}?" in message) == bool(suggestion)


def test_names_in_upper_case_are_understood():
    assert lattice("FCC", 0.5) == lattice("fcc", 0.5)


@pytest.mark.parametrize("phi", [0, -0.1, math.nan, math.inf, 0.7405, "dense", None])
def test_impossible_packing_fraction(phi):
    with pytest.raises(UsageError, match=r"sqrt\(2\)\*pi/6 = 0\.740480489693.*got"):
        lattice("fcc", phi)


@pytest.mark.parametrize("repeats", [0, -1, (2, 2), (2, 2, 0), (2, 2, 1.5)])
def test_impossible_repeats(repeats):
    with pytest.raises(UsageError, match="repeats must be"):
        lattice_sites("fcc", repeats, 1.0)


@pytest.mark.parametrize("spacing", [0, -1.0, math.nan, math.inf])
def test_impossible_spacing(spacing):
    with pytest.raises(UsageError, match="spacing must be"):
        lattice_sites("fcc", 2, spacing)
