"""Moves through windows, decided by plane geometry."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from shapely import LineString

from trajcage.analysis.windows import crosses_window, window_corners
from trajcage.model import Box

TRIANGLE = np.array([[1.0, 0.0, 1.0], [-1.0, 1.0, 1.0], [-1.0, -1.0, 1.0]])


@pytest.mark.parametrize(
    ("moved", "expected"),
    [
        ([0.0, 0.0, 2.0], 1),
        ([0.0, 0.0, 1.001], 1),
        ([0.0, 0.0, 0.999], 0),  # too short
        ([0.0, 0.0, -2.0], 0),  # the other way
        ([2.4, 0.0, 2.0], 0),  # past a corner: x = 1.2 in the plane
        ([1.9, 0.0, 2.0], 1),
        ([3.0, 1.0, 0.0], 0),  # parallel to the plane
        ([0.0, 0.0, 0.0], 0),
        ([np.nan, 0.0, 2.0], -1),
    ],
)
def test_a_triangle(moved, expected):
    turns = Rotation.random(5, random_state=1).as_matrix()
    corners = np.stack([TRIANGLE, *(TRIANGLE @ turn.T for turn in turns)])
    moves = np.stack([np.array(moved), *(turn @ moved for turn in turns)])
    assert crosses_window(corners, moves).tolist() == [expected] * 6


def test_edges_in_the_plane_against_shapely():
    rng = np.random.default_rng(2)
    corners, moved = rng.normal(size=(500, 2, 2)), rng.normal(size=(500, 2))
    expected = [
        LineString([(0.0, 0.0), m]).intersects(LineString(edge))
        for edge, m in zip(corners, moved, strict=True)
    ]
    assert 20 < sum(expected) < 480
    np.testing.assert_array_equal(crosses_window(corners, moved), expected)


def test_corners_are_the_nearest_images():
    box = Box(np.array([[6.0, 0.0], [2.0, 5.0]]), np.zeros(2), (True, True))
    positions = np.array([[0.2, 0.2], [5.9, 0.3], [2.1, 4.8], [2.9, 2.4]])
    neighbors = np.array([[1, 2], [1, -1], [1, 3]])
    found = window_corners(box, positions, np.array([0, 0, 0]), neighbors)
    np.testing.assert_allclose(found[0], [[-0.3, 0.1], [-0.1, -0.4]], atol=1e-12)
    # No window, and a corner further than half the box: unknown.
    assert np.isnan(found[1:]).all()


def test_open_edges_have_no_images():
    box = Box.from_any([6.0, 6.0], periodic="none")
    positions = np.array([[0.5, 0.5], [5.5, 0.5], [0.5, 1.5]])
    found = window_corners(box, positions, np.array([0]), np.array([[1, 2]]))
    np.testing.assert_allclose(found[0], [[5.0, 0.0], [0.0, 1.0]])
