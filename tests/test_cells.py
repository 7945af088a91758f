"""The law of the cell volumes against gamma laws; packings: test_published_packings."""

import math

import numpy as np
import pytest
from packings import fcc
from scipy.stats import gamma

from trajcage.analysis.cells import fields, measure_cells
from trajcage.lattices import SMALLEST_VORONOI_CELL
from trajcage.model import Box, Frame
from trajcage.neighborhood import tessellate


def as_frame(n, radii, dimensions=3):
    """Particles whose places do not matter."""
    box = Box.from_any([100.0] * dimensions)
    positions = np.random.default_rng(0).random((n, dimensions)) * 100.0
    return Frame(positions, np.broadcast_to(radii, n).astype(float), box)


@pytest.mark.parametrize("dimensions", [2, 3])
@pytest.mark.parametrize("k", [1.0, 12.0, 60.0])
def test_shape_of_a_gamma_law(dimensions, k):
    # volumes drawn by scipy above the smallest cell of diameter 1.62; the shape of a
    # gamma law is its mean squared over its variance
    n, diameter = 40_000, 1.62
    smallest = SMALLEST_VORONOI_CELL[dimensions].value * diameter**dimensions
    law = gamma(k, loc=smallest, scale=0.3 * smallest / k)
    volumes = law.rvs(n, random_state=1)
    found = measure_cells(as_frame(n, diameter / 2, dimensions), volumes)
    assert found["cell_volume_shape"] == pytest.approx(k, rel=0.03)
    fitted, *_ = gamma.fit(volumes, floc=smallest)  # maximum likelihood
    assert found["cell_volume_shape"] == pytest.approx(fitted, rel=0.03)


def test_cells_that_are_not_known_are_left_out_and_counted():
    volumes = np.random.default_rng(1).uniform(1.0, 2.0, 50)
    whole = measure_cells(as_frame(50, 0.5), volumes)
    cut = np.append(volumes, [np.nan, np.nan])
    found = measure_cells(as_frame(52, 0.5), cut)
    assert found["cells_unknown"] == 2
    assert found["cell_volume_shape"] == whole["cell_volume_shape"]
    local = found["local_packing_fraction"]
    np.testing.assert_allclose(local[:50], math.pi / 6 / volumes)
    assert np.isnan(local[50:]).all()


def test_no_shape_for_unequal_particles_or_equal_cells():
    volumes = np.random.default_rng(1).uniform(1.0, 2.0, 4)
    unequal = measure_cells(as_frame(4, [0.5, 0.5, 0.6, 0.6]), volumes)
    assert np.isnan(unequal["cell_volume_shape"])
    crystal = fcc(3, 0.6)
    frame = Frame(crystal.positions, crystal.radii, Box.from_any(crystal.lengths))
    found = measure_cells(frame, tessellate(frame)[0])
    assert np.isnan(found["cell_volume_shape"])
    np.testing.assert_allclose(found["local_packing_fraction"], 0.6, rtol=1e-6)


@pytest.mark.parametrize("dimensions", [2, 3])
def test_results_are_the_declared_fields(dimensions):
    found = measure_cells(as_frame(5, 0.5, dimensions), np.ones(5))
    declared = fields(dimensions)
    assert set(found) == {field.name for field in declared}
    for field in declared:
        shape = (5,) if field.per_particle else ()
        assert np.shape(found[field.name]) == shape
