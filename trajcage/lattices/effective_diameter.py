"""The hard-sphere diameter that stands for a soft repulsion."""

import math

from trajcage.errors import UsageError

__all__ = ["effective_diameter_wca"]


def effective_diameter_wca(epsilon_over_kt: float) -> float:
    """Return the Barker-Henderson diameter of the Weeks-Chandler-Andersen repulsion.

    The integral of 1 - exp(-u(r)/kT) over r, with u the Lennard-Jones potential cut at
    its minimum 2^(1/6) and shifted to zero there.

    Parameters
    ----------
    epsilon_over_kt : float
        Strength of the repulsion over the thermal energy.

    Returns
    -------
    float
        Diameter in units of the Lennard-Jones length.

    Raises
    ------
    UsageError
        If the strength is not a positive number.

    Notes
    -----
    Barker & Henderson 1967, J. Chem. Phys. 47, 4714; Weeks, Chandler & Andersen 1971,
    J. Chem. Phys. 54, 5237.
    """
    if not (math.isfinite(epsilon_over_kt) and epsilon_over_kt > 0):
        msg = f"epsilon over kT must be a positive number, got {epsilon_over_kt!r}"
        raise UsageError(msg)
    from scipy.integrate import quad  # here: it takes longer to load than all else

    contact = 2 ** (1 / 6)
    # inside this distance u exceeds 50 kT and the integrand is 1 to rounding:
    # u = epsilon (2 r^-6 - 1)^2
    core = (2 / (1 + math.sqrt(50 / epsilon_over_kt))) ** (1 / 6)

    def missing_probability(r: float) -> float:
        return -math.expm1(-epsilon_over_kt * (2 * r**-6 - 1) ** 2)

    soft, _ = quad(missing_probability, core, contact, epsabs=1e-14, epsrel=1e-13)
    return float(core + soft)
