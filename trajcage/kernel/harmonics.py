"""Spherical harmonics of bonds, their averages and rotation invariants.

Rows hold q_lm for m = 0 ... l; that of -m is the conjugate of that of m times (-1)^m.
"""

from functools import cache
from math import factorial, pi, sqrt

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.jit import compiled

__all__ = ["aligned_bonds", "average_over_bonds", "bond_harmonics", "invariants"]


def bond_harmonics(
    offsets: NDArray[np.int64],
    vectors: NDArray[np.float64],
    weights: NDArray[np.float64],
    degree: int,
) -> NDArray[np.complex128]:
    """Weighted mean of the spherical harmonics over the bonds of each particle.

    Parameters
    ----------
    offsets : (n + 1,) int64
        Where the bonds of each particle start.
    vectors : (m, 3) float64
        Bonds, of any length.
    weights : (m,) float64
        Their weights.
    degree : int
        Degree l.

    Returns
    -------
    (n, l + 1) complex128
        NaN for particles without bonds.
    """
    return np.asarray(_harmonics(offsets, vectors, weights, _polynomials(degree)))


@cache
def _polynomials(degree: int) -> NDArray[np.float64]:
    """Coefficients of the harmonics, by m and falling powers of z^2, (l + 1, l//2 + 1).

    Y_lm = (x + iy)^m z^p(m) times a polynomial in z^2 on the unit sphere, p = 0 or 1:
    the m-th derivative of the Legendre polynomial, normalized, with the Condon-Shortley
    phase. Row m starts with zeros, as its degree is lower.
    """
    table = np.zeros((degree + 1, degree // 2 + 1))
    for m in range(degree + 1):
        norm = (-1) ** m * sqrt(
            (2 * degree + 1) / (4 * pi) * factorial(degree - m) / factorial(degree + m)
        )
        for k in range((degree - m) // 2 + 1):  # the power of z is l - 2k - m
            legendre = (
                (-1) ** k
                * factorial(2 * degree - 2 * k)
                / factorial(k)
                / factorial(degree - k)
                / factorial(degree - 2 * k - m)
                / 2**degree
            )
            table[m, degree // 2 - (degree - m) // 2 + k] = norm * legendre
    return table


@compiled
def _harmonics(offsets, vectors, weights, table):
    n = len(offsets) - 1
    size, terms = table.shape
    result = np.empty((n, size), np.complex128)
    real = np.empty(size)
    imag = np.empty(size)
    for i in range(n):
        for m in range(size):
            real[m] = 0.0
            imag[m] = 0.0
        total = 0.0
        for k in range(offsets[i], offsets[i + 1]):
            x, y, z = vectors[k, 0], vectors[k, 1], vectors[k, 2]
            scale = 1.0 / np.sqrt(x * x + y * y + z * z)
            x, y, z = x * scale, y * scale, z * scale
            a, b = weights[k], 0.0  # (x + iy)^m
            total += a
            z2 = z * z
            for m in range(size):
                value = table[m, 0]
                for term in range(1, terms):
                    value = value * z2 + table[m, term]
                if (size - 1 - m) % 2 == 1:
                    value *= z
                real[m] += value * a
                imag[m] += value * b
                a, b = a * x - b * y, a * y + b * x
        for m in range(size):
            result[i, m] = complex(real[m] / total, imag[m] / total)
    return result


def average_over_bonds(
    offsets: NDArray[np.int64],
    neighbors: NDArray[np.int64],
    harmonics: NDArray[np.complex128],
) -> NDArray[np.complex128]:
    """Mean over each particle and its neighbors, (n, l + 1) complex128.

    Parameters
    ----------
    offsets, neighbors : (n + 1,), (m,) int64
        Bonds in compressed rows.
    harmonics : (n, l + 1) complex128
        Harmonics of the particles.
    """
    return np.asarray(_average(offsets, neighbors, harmonics))


@compiled
def _average(offsets, neighbors, harmonics):
    n, size = harmonics.shape
    result = np.empty((n, size), np.complex128)
    for i in range(n):
        for m in range(size):
            result[i, m] = harmonics[i, m]
        for k in range(offsets[i], offsets[i + 1]):
            j = neighbors[k]
            for m in range(size):
                result[i, m] += harmonics[j, m]
        count = 1.0 + offsets[i + 1] - offsets[i]
        for m in range(size):
            result[i, m] /= count
    return result


def invariants(
    harmonics: NDArray[np.complex128],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Rotation invariants of second and third order.

    Parameters
    ----------
    harmonics : (n, l + 1) complex128
        Harmonics of the particles, of even degree l.

    Returns
    -------
    q, w : (n,) float64
        q_l, and w_l divided by (sum_m |q_lm|^2)^(3/2).
    """
    degree = harmonics.shape[1] - 1
    triples, factors = _triples(degree)
    q, w = _invariants(harmonics, triples, factors)
    return np.sqrt(4.0 * pi / (2 * degree + 1)) * q, w


@cache
def _triples(degree: int) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Terms of the third-order invariant: a >= b >= c, a + b + c = 0, and factors.

    For even l the 3j symbols do not change with the order of the three m or with
    their signs, so that each term stands for all of these; the signs make it real.
    """
    triples, factors = [], []
    for a in range(degree + 1):
        for b in range(-degree, a + 1):
            c = -a - b
            if not -degree <= c <= b or (a, b, c) < (-c, -b, -a):
                continue
            orders = len(
                {(a, b, c), (a, c, b), (b, a, c), (b, c, a), (c, a, b), (c, b, a)}
            )
            signs = 1 if (a, b, c) == (-c, -b, -a) else 2
            triples.append((a, b, c))
            factors.append(orders * signs * _wigner_3j(degree, a, b))
    return np.array(triples), np.array(factors)


def _wigner_3j(degree: int, a: int, b: int) -> float:
    """3j symbol of (l l l; a b -a-b) for even l by the formula of Racah (1942)."""
    c = -a - b
    total = 0.0
    for k in range(degree + 1):
        parts = (k, degree - k, degree - a - k, degree + b - k, a + k, -b + k)
        if min(parts) >= 0:
            product = 1
            for part in parts:
                product *= factorial(part)
            total += (-1) ** k / product
    roots = factorial(degree) ** 3 / factorial(3 * degree + 1)
    for m in (a, b, c):
        roots *= factorial(degree + m) * factorial(degree - m)
    return float((-1) ** c * sqrt(roots) * total)


@compiled
def _invariants(harmonics, triples, factors):
    n, size = harmonics.shape
    length = np.empty(n)
    third = np.empty(n)
    for i in range(n):
        square = harmonics[i, 0].real ** 2
        for m in range(1, size):
            square += 2.0 * (harmonics[i, m].real ** 2 + harmonics[i, m].imag ** 2)
        total = 0.0
        for t in range(len(factors)):
            product = complex(factors[t], 0.0)
            for axis in range(3):
                m = triples[t, axis]
                value = harmonics[i, abs(m)]
                if m < 0:
                    value = value.conjugate()
                    if m % 2 == 1:
                        value = -value
                product *= value
            total += product.real
        length[i] = np.sqrt(square)
        third[i] = total / (square * length[i])
    return length, third


def aligned_bonds(
    offsets: NDArray[np.int64],
    neighbors: NDArray[np.int64],
    harmonics: NDArray[np.complex128],
    threshold: float,
) -> NDArray[np.int64]:
    """Count the bonds whose two particles have alike harmonics, (n,) int64.

    Parameters
    ----------
    offsets, neighbors : (n + 1,), (m,) int64
        Bonds in compressed rows.
    harmonics : (n, l + 1) complex128
        Harmonics of the particles.
    threshold : float
        A bond counts above this normalized product of the harmonics.
    """
    return np.asarray(_aligned(offsets, neighbors, harmonics, float(threshold)))


@compiled
def _aligned(offsets, neighbors, harmonics, threshold):
    n, size = harmonics.shape
    unit = np.empty((n, 2 * size))  # all m as one real vector of length 1
    for i in range(n):
        square = 0.0
        for m in range(size):
            share = 1.0 if m == 0 else np.sqrt(2.0)
            unit[i, 2 * m] = share * harmonics[i, m].real
            unit[i, 2 * m + 1] = share * harmonics[i, m].imag
            square += unit[i, 2 * m] ** 2 + unit[i, 2 * m + 1] ** 2
        for m in range(2 * size):
            unit[i, m] /= np.sqrt(square)
    count = np.zeros(n, np.int64)
    for i in range(n):
        for k in range(offsets[i], offsets[i + 1]):
            j = neighbors[k]
            product = 0.0
            for m in range(2 * size):
                product += unit[i, m] * unit[j, m]
            count[i] += product > threshold
    return count
