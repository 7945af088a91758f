"""Bonds found for some particles are those found for all."""

import numpy as np
import pytest

from trajcage.analysis.bonds import Bonds, all_bonds, bonds_of
from trajcage.analysis.unwrapping import Unwrapper
from trajcage.model import Box, Frame

TILTED = np.array([[9.0, 0.0, 0.0], [3.5, 8.0, 0.0], [-2.0, 3.0, 8.5]])
BOXES = {
    "cuboid": Box.from_any([8.0, 9.0, 12.0]),
    "tilted": Box(TILTED, np.array([3.0, -4.0, 1.0]), (True,) * 3),
    "slab": Box.from_any([8.0, 12.0, 9.0], periodic="xz"),
    "open": Box.from_any([9.0] * 3, periodic="none"),
    "small": Box.from_any([2.4, 9.0, 9.0]),  # several images of one neighbor
    "plane": Box.from_any([20.0, 14.0]),
}


def walked(box, n=300, n_frames=8):
    """The last of a few frames of a random walk, with its continuous positions."""
    rng = np.random.default_rng(4)
    x = rng.random((n, box.dimensions)) @ box.vectors + box.origin
    unwrapper = Unwrapper(n, box.dimensions, remove_drift=False)
    radii = rng.uniform(0.3, 0.6, n)
    for k in range(n_frames):
        frame = Frame(box.wrap(x), radii, box, index=k)
        motion = unwrapper.advance(frame)
        x = x + rng.uniform(-0.4, 0.4, x.shape)
    return frame, motion


def as_set(bonds: Bonds):
    shifts = np.zeros((len(bonds.shifts), len(bonds)), dtype=np.int32)
    shifts[:, bonds.crossing] = bonds.shifts
    return set(zip(bonds.first, bonds.second, *shifts, strict=True))


@pytest.mark.parametrize("name", BOXES)
def test_of_some_is_part_of_all(name):
    frame, motion = walked(BOXES[name])
    everyone = all_bonds(frame, motion, 1.4)
    lengths = np.sqrt(everyone.squared_lengths(motion, frame.box))
    contact = frame.radii[everyone.first] + frame.radii[everyone.second]
    assert np.all(lengths <= 1.4 * contact * (1.0 + 1e-12))
    for chosen in ([7], [3, 20, 299], list(range(0, 300, 2)), list(range(300))):
        some = bonds_of(np.array(chosen), frame, motion, 1.4)
        kept = np.flatnonzero(np.isin(everyone.first, chosen))
        assert as_set(some) == as_set(everyone.select(kept))
        assert len(some) == len(kept)


def test_bonds_against_all_pairs():
    box = BOXES["tilted"]
    frame, motion = walked(box)
    i, j = np.triu_indices(frame.n_particles, 1)
    apart = box.minimum_image(frame.positions[j] - frame.positions[i])
    contact = frame.radii[i] + frame.radii[j]
    near = np.linalg.norm(apart, axis=1) <= 1.4 * contact
    expected = set(zip(i[near], j[near], strict=True))
    found = all_bonds(frame, motion, 1.4)
    ours = set(zip(found.first, found.second, strict=True))
    assert ours == expected | {(b, a) for a, b in expected}


def test_a_bond_keeps_its_image_when_particles_cross():
    box = BOXES["cuboid"]
    radii = np.array([0.5, 0.5])
    unwrapper = Unwrapper(2, 3, remove_drift=False)
    bonds = None
    for k in range(60):
        x = np.array([[0.3 * k, 1.0, 1.0], [0.3 * k + 1.2, 1.0, 1.0]])
        frame = Frame(box.wrap(x), radii, box, index=k)
        motion = unwrapper.advance(frame)
        bonds = all_bonds(frame, motion, 1.4) if bonds is None else bonds
        np.testing.assert_allclose(bonds.squared_lengths(motion, box), 1.44, rtol=1e-12)


def test_state_of_bonds():
    frame, motion = walked(BOXES["tilted"])
    bonds = all_bonds(frame, motion, 1.4)
    again = Bonds.from_state(bonds.state())
    assert as_set(again) == as_set(bonds)
    assert again.first.dtype == bonds.first.dtype
    twice = bonds.join(again)
    assert len(twice) == 2 * len(bonds)
    assert 0 < len(bonds.crossing) < len(bonds)
    once = bonds.squared_lengths(motion, frame.box)
    found = twice.squared_lengths(motion, frame.box)
    np.testing.assert_array_equal(found, np.concatenate((once, once)))
