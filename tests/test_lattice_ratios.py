"""Measured means over those of ideal lattices at the packing fraction of the frame."""

import math

import numpy as np
import pytest
from kernel_cases import block

from trajcage.analysis.cages import CageOptions, frame_cages
from trajcage.analysis.comparison import compare_lattices
from trajcage.analysis.statistics import mean_estimate
from trajcage.analysis.thermodynamics import (
    CompressibilityStatus,
    fields,
    measure_thermodynamics,
)
from trajcage.lattices import LATTICES, lattice, thresholds
from trajcage.model import Box, Frame


def measured(positions, vectors, radii=0.5):
    radii = np.broadcast_to(np.asarray(radii, float), len(positions)).copy()
    frame = Frame(positions, radii, Box.from_any(vectors))
    table, overlaps = frame_cages(frame, CageOptions())
    return measure_thermodynamics(frame, table, overlaps, 0.0)


@pytest.mark.parametrize("name", LATTICES)
def test_a_perfect_lattice_is_once_itself(name):
    limit = thresholds(name)
    for phi in np.linspace(limit.escape.value, limit.close_packing.value, 5)[1:-1]:
        positions, vectors, _ = block(name, phi)
        scale = 1.62  # any unit of length
        found = measured(scale * positions, scale * vectors, scale / 2)
        assert found["packing_fraction"] == pytest.approx(phi)
        for part in ("free_volume", "free_surface"):
            assert found[f"lattice_{name}_{part}_ratio"] == pytest.approx(1, rel=1e-7)
            for other, entry in LATTICES.items():
                if entry.dimensions != LATTICES[name].dimensions:
                    assert f"lattice_{other}_{part}" not in found
                    continue
                # none beyond its close packing, none where the particle escapes
                ends = thresholds(other)
                exists = ends.escape.value <= phi <= ends.close_packing.value
                for key in (f"lattice_{other}_{part}", f"lattice_{other}_{part}_ratio"):
                    assert math.isfinite(found[key]) == exists


def test_close_packing_leaves_nothing_to_compare_with():
    positions = np.array(list(np.ndindex(6, 6)), float)
    found = measured(positions, 6.0 * np.eye(2))
    assert found["packing_fraction"] == LATTICES["square"].close_packing.value
    assert found["free_volume_mean"] == pytest.approx(0, abs=1e-12)
    for part in ("free_volume", "free_surface"):
        assert found[f"lattice_square_{part}"] == 0
        assert math.isnan(found[f"lattice_square_{part}_ratio"])
    assert found["compressibility_status"] == CompressibilityStatus.IDEAL_LATTICE
    # one vacancy: no lattice any more, and contacts that never cease
    found = measured(positions[1:], 6.0 * np.eye(2))
    assert found["compressibility_status"] == CompressibilityStatus.MEASURED
    assert found["compressibility_factor"] == math.inf


def test_unequal_particles_stand_beside_equal_ones_of_the_same_number_and_volume():
    positions, vectors, spacing = block("fcc", 0.45, least=5.0)
    radii = np.where(np.arange(len(positions)) % 2, 0.52, 0.47)
    found = measured(positions, vectors, radii)
    diameter = (np.mean((2 * radii) ** 3)) ** (1 / 3)
    phi = math.pi / 6 * diameter**3 * len(radii) / np.prod(np.diag(vectors))
    expected = lattice("fcc", phi)
    assert expected.spacing * diameter == pytest.approx(spacing)  # the same sites
    assert found["lattice_fcc_free_volume"] == pytest.approx(
        expected.free_volume * diameter**3
    )
    for part, power in (("free_volume", 3), ("free_surface", 2)):
        reference = getattr(expected, part) * diameter**power
        assert found[f"lattice_fcc_{part}"] == pytest.approx(reference)
        ratio = found[f"{part}_mean"] / reference
        assert found[f"lattice_fcc_{part}_ratio"] == pytest.approx(ratio)


def test_each_frame_is_compared_at_its_own_packing_fraction():
    series = [measured(*block("fcc", phi, least=4.0)[:2]) for phi in (0.5, 0.55, 0.6)]
    names = [f.name for f in fields(3) if f.name.startswith("lattice_")]
    estimates = {name: mean_estimate([one[name] for one in series]) for name in names}
    rows = {row["name"]: row for row in compare_lattices(3, 0.55, estimates)}
    assert set(rows) == {"fcc", "hcp", "bcc"}
    for part in ("free_volume", "free_surface"):
        # the ratio of the means would differ from 1 as the densities do
        assert rows["fcc"][f"{part}_ratio"] == pytest.approx(1, rel=1e-7)
        assert rows["fcc"][f"{part}_ratio_error"] < 1e-7
        own = np.mean([getattr(lattice("fcc", phi), part) for phi in (0.5, 0.55, 0.6)])
        assert rows["fcc"][part] == pytest.approx(own)
