"""Pressure from cages in equilibrium against published equations of state.

Z = 1 + <wall sum / free volume> / 2d, the mean over particles of the ratio (Hoover,
Ashurst & Grover 1972, J. Chem. Phys. 57, 1259; Speedy 1980, J. Chem. Soc. Faraday
Trans. II 76, 693; for mixtures Corti & Bowles 1999, Mol. Phys. 96, 1623). The error
bar is that of independent frames.
"""

import math

import monte_carlo
import numpy as np
import pytest
from kernel_cases import CLOSED, WRAPPED, measure

from trajcage.lattices import EQUATIONS, sphere_mixture


def sampled(run, frames, sweeps):
    """Mean and standard error of Z over frames that lie so many sweeps apart."""
    d = run.dimensions
    values = []
    for _ in range(frames):
        run.run(sweeps)
        cages = measure(run.positions, run.lengths, run.radii, reach=math.inf)
        assert set(cages.status) <= {CLOSED, WRAPPED}
        values.append(1 + np.mean(cages.wall_sum / cages.free_volume) / (2 * d))
    return np.mean(values), np.std(values, ddof=1) / math.sqrt(frames)


def agree(found, error, exact, systematic=0.0):
    """Within three standard errors and what the reference itself may be off."""
    assert abs(found - exact) < 3 * error + systematic


def test_fluid():
    run = monte_carlo.random_fluid(1000, 0.40, 0.5, seed=21, sweeps=500)
    found, error = sampled(run, 14, 40)
    assert error < 0.01 * found
    exact = EQUATIONS["kolafa-labik-malijevsky"].compressibility_factor(0.40)
    # Kolafa, Labik & Malijevsky 2004 at 0.40; N = 1000 shifts Z by order Z / N
    assert exact == pytest.approx(6.945460, abs=1e-6)
    agree(found, error, exact, 0.01)
    agree(
        found, error, EQUATIONS["carnahan-starling"].compressibility_factor(0.40), 0.02
    )


def test_disks():
    """N = 72 in a box 1 : sqrt(3)/2 at 0.67: beta P (2R)^2 = 7.98553(13).

    Li et al. 2022, J. Chem. Phys. 157, 234111 (digitized data of that work).
    """
    shape = (1.0, math.sqrt(3) / 2)
    run = monte_carlo.random_fluid(
        72, 0.67, 0.5, seed=22, dimensions=2, shape=shape, sweeps=20000
    )
    found, error = sampled(run, 250, 200)
    pressure = 4 * 0.67 / math.pi
    assert error < 0.01 * found
    agree(found * pressure, error * pressure, 7.98553)


@pytest.mark.parametrize("phi", [0.545, 0.60])
def test_crystal(phi):
    """Hall 1972, J. Chem. Phys. 57, 2252; Speedy 1998, J. Phys. Cond. Mat. 10, 4387."""
    crystal = monte_carlo.fcc(5, phi)
    run = monte_carlo.MonteCarlo(crystal.positions, crystal.lengths, crystal.radii, 23)
    run.equilibrate(1500)
    found, error = sampled(run, 24, 60)
    assert error < 0.01 * found
    # the fits differ by 1e-3 of Z, N = 500 shifts Z by order Z / N
    for name in ("hall", "speedy-fcc"):
        exact = EQUATIONS[name].compressibility_factor(phi)
        agree(found, error, exact, 0.003 * exact)


@pytest.mark.parametrize("phi", [0.40, 0.48])
def test_mixture(phi):
    """Boublik 1970, J. Chem. Phys. 53, 471; Mansoori et al. 1971, ibid. 54, 1523."""
    radii = monte_carlo.binary(600, 1.4)
    run = monte_carlo.random_fluid(
        600, phi, radii, seed=24, sweeps=1000, swap_fraction=0.2
    )
    found, error = sampled(run, 24, 25)
    assert error < 0.01 * found
    exact = sphere_mixture(radii).compressibility_factor(phi)
    agree(found, error, exact, 0.005 * exact)


def test_a_gas_follows_the_virial_series():
    """Z = 1 + 4 phi + 10 phi^2 + 18.36 phi^3 (3D), 1 + 2 phi + 3.128 phi^2 (2D)."""
    run = monte_carlo.random_fluid(40, 0.05, 0.5, seed=25, sweeps=300)
    found, error = sampled(run, 10, 60)
    agree(found, error, 1 + 4 * 0.05 + 10 * 0.05**2 + 18.3648 * 0.05**3, 0.01)
    run = monte_carlo.random_fluid(50, 0.1, 0.5, seed=26, dimensions=2, sweeps=300)
    found, error = sampled(run, 20, 60)
    series = 1 + 2 * 0.1 + 3.12802 * 0.01 + 4.25785 * 0.001
    # finite N shifts Z by order (Z - 1) / N
    agree(found, error, series, 6e-3)
