"""Continuous paths across periodic boundaries."""

import numpy as np
import pytest
from moving import frames

from trajcage.analysis.unwrapping import Unwrapper
from trajcage.errors import FrameError
from trajcage.model import Box, Frame

TILTED = Box(
    np.array([[6.0, 0.0, 0.0], [2.5, 5.0, 0.0], [-1.0, 2.0, 5.5]]),
    np.array([1.0, -2.0, 0.5]),
    (True,) * 3,
)
CUBE = Box.from_any([6.0, 7.0, 8.0])


def walk(rng, n_frames=60, n=40, size=0.5):
    start = rng.random((n, 3)) * 6.0
    return start + np.cumsum(rng.normal(0.0, size, (n_frames, n, 3)), axis=0)


@pytest.mark.parametrize("box", [CUBE, TILTED], ids=["cuboid", "triclinic"])
@pytest.mark.parametrize("flags", [True, False])
def test_a_walk_is_recovered(box, flags):
    paths = walk(np.random.default_rng(1), size=0.3)
    unwrapper = Unwrapper(40, 3, remove_drift=False)
    for k, positions in enumerate(paths):
        wrapped = box.wrap(positions)
        images = np.rint((positions - wrapped) @ np.linalg.inv(box.vectors))
        frame = Frame(
            wrapped,
            np.full(40, 0.5),
            box,
            index=k,
            images=images.astype(np.int32) if flags else None,
        )
        motion = unwrapper.advance(frame)
        np.testing.assert_allclose(motion.path, positions - paths[0], atol=1e-11)
        # Continuous positions differ from the truth by the first frame's wrapping.
        offset = motion.positions - positions
        np.testing.assert_allclose(offset, box.wrap(paths[0]) - paths[0], atol=1e-11)
    assert np.abs(paths[-1] - paths[0]).max() > 6.0  # it did cross


def test_image_flags_allow_steps_beyond_half_the_box():
    images = np.zeros((1, 3), dtype=np.int32)
    unwrapper = Unwrapper(1, 3, remove_drift=False)
    radii = np.array([0.5])
    unwrapper.advance(Frame(np.array([[1.0, 1, 1]]), radii, CUBE, images=images))
    images = np.array([[2, 0, 0]], dtype=np.int32)
    moved = unwrapper.advance(
        Frame(np.array([[2.0, 1, 1]]), radii, CUBE, index=1, images=images)
    )
    np.testing.assert_allclose(moved.path, [[13.0, 0.0, 0.0]])


def test_positions_that_come_unwrapped_stay_as_they_are():
    paths = walk(np.random.default_rng(2), size=0.3)
    unwrapper = Unwrapper(40, 3, remove_drift=False)
    for positions, frame in zip(paths, frames(paths, CUBE, wrap=False), strict=True):
        np.testing.assert_array_equal(unwrapper.advance(frame).positions, positions)


def test_a_changing_box_carries_its_particles_along():
    # Fixed fractional coordinates, some outside the box: no displacement.
    fractional = np.random.default_rng(3).random((30, 3)) * 4.0 - 2.0
    unwrapper = Unwrapper(30, 3, remove_drift=False)
    for k in range(20):
        box = Box(TILTED.vectors * (1.0 + 0.02 * np.sin(k)), TILTED.origin, (True,) * 3)
        positions = fractional @ box.vectors + box.origin
        frame = Frame(box.wrap(positions), np.full(30, 0.5), box, index=k)
        motion = unwrapper.advance(frame)
        np.testing.assert_allclose(motion.path, 0.0, atol=1e-12)
        # Pair vectors are those of the present box.
        apart = motion.positions[1:] - motion.positions[0]
        turns = (apart - (positions[1:] - positions[0])) @ np.linalg.inv(box.vectors)
        np.testing.assert_allclose(turns, np.rint(turns), atol=1e-12)


def test_drift_can_be_removed_and_is_recorded():
    rng = np.random.default_rng(4)
    paths = walk(rng, size=0.1)
    drifting = paths + 0.4 * np.arange(60)[:, None, None]
    still, carried = (Unwrapper(40, 3, remove_drift=True) for _ in range(2))
    for a, b in zip(frames(paths, CUBE), frames(drifting, CUBE), strict=True):
        first, second = still.advance(a), carried.advance(b)
    np.testing.assert_allclose(first.path, second.path, atol=1e-11)
    np.testing.assert_allclose(first.path.mean(axis=0), 0.0, atol=1e-12)
    np.testing.assert_allclose(
        carried.drift, (drifting[-1] - drifting[0]).mean(axis=0), atol=1e-11
    )


def test_steps_near_half_the_box_are_refused():
    paths = np.ones((2, 3, 3))
    paths[1, 1, 0] += 2.7  # 0.45 of the height
    unwrapper = Unwrapper(3, 3, remove_drift=False)
    first, second = frames(paths, CUBE)
    unwrapper.advance(first)
    with pytest.raises(FrameError, match=r"frame 1 .*0.45 for particle 1;.*more often"):
        unwrapper.advance(second)


def test_open_edges_have_no_crossings():
    box = Box.from_any([6.0, 7.0, 8.0], periodic="yz")
    paths = np.ones((2, 1, 3))
    paths[1, 0, 0] += 4.5
    unwrapper = Unwrapper(1, 3, remove_drift=False)
    for frame in frames(paths, box):
        motion = unwrapper.advance(frame)
    np.testing.assert_allclose(motion.path, [[4.5, 0.0, 0.0]])


def test_flags_that_come_and_go_are_refused():
    unwrapper = Unwrapper(1, 3, remove_drift=False)
    x, radii = np.ones((1, 3)), np.array([0.5])
    unwrapper.advance(Frame(x, radii, CUBE, images=np.zeros((1, 3), np.int32)))
    with pytest.raises(FrameError, match="in all frames or in none, found none here"):
        unwrapper.advance(Frame(x, radii, CUBE, index=1))
