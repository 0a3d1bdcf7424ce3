"""Photon groups, how black-body radiation divides among them, and an opacity to try things with.

This module knows photons and matter at one place; it refuses to know zones' neighbours and time.

**Groups.** Photon energies are given as h nu / k_B in kelvin, so that x = h nu / (k_B T) is a plain ratio.
The first group reaches down to zero and the last up to infinity: the fractions of any Planck spectrum
sum to 1 and no energy is lost at the ends.

**Planck fractions.** The share of black-body radiation above x is evaluated below x = 3 from Bernoulli's
series of u / (exp(u) - 1) and above from the sum over exp(-n x) (Clark 1987, J. Comput. Phys. 70, 311, gives
both expansions; from memory). Both are cut where the next term is below 1e-12 at x = 3.

**The opacity is invented**, for trying out performance: power laws with the flavour of free-free absorption,
and a grey part with the flavour of electron scattering, some of which shifts photons to other groups, as
Compton scattering would. None of its numbers describe a real material.
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled, inlined  # isort: skip  (must precede numba)

import math
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.exponential import exponentials

Floats = NDArray[np.float64]

SPLIT = 3.0
"""Where the two series meet, in h nu / (k_B T)."""
LOW_TERMS = 17
"""Even powers in the low series: the next is (3 / 2 pi)^36 = 3e-12 times 0.15."""
HIGH_TERMS = 10
"""Exponentials in the high series: the next is exp(-33) = 5e-15 times 4."""
NORMALISATION = 15.0 / math.pi**4
"""Inverse of the integral of x^3 / (exp(x) - 1) from zero to infinity."""


def bernoulli_coefficients(terms: int) -> Floats:
    """Coefficients of x^3 times 1, x, x^2, x^4, x^6 ... in the integral of u^3 / (exp(u) - 1) to x."""
    numbers = [Fraction(1)]
    for m in range(1, 2 * terms + 1):
        numbers.append(-sum(math.comb(m + 1, k) * numbers[k] for k in range(m)) / Fraction(m + 1))
    powers = [0, 1, *range(2, 2 * terms + 1, 2)]
    return np.array([float(numbers[p] / (math.factorial(p) * (p + 3))) for p in powers])


_LOW = bernoulli_coefficients(LOW_TERMS)


@dataclass(frozen=True)
class PhotonGroups:
    """Photon groups of equal width in the logarithm of the energy.

    Parameters
    ----------
    count : int
        Number of groups, at least 1.
    lowest, highest : float
        The nominal range in h nu / k_B [K]; the end groups also hold what lies outside.
    """

    count: int = 16
    lowest: float = 3e6
    highest: float = 3e10

    @property
    def edges(self) -> Floats:
        """The ``count - 1`` boundaries between groups [K]."""
        return np.geomspace(self.lowest, self.highest, self.count + 1)[1:-1]

    @property
    def centres(self) -> Floats:
        """Geometric means of the nominal boundaries [K], one a group."""
        nominal = np.geomspace(self.lowest, self.highest, self.count + 1)
        return np.asarray(np.sqrt(nominal[1:] * nominal[:-1]))


@dataclass(frozen=True)
class PowerLawOpacity:
    """The invented opacity: absorption k0 rho (T/T0)^-n (nu/nu0)^-m and grey scattering s rho [1/cm].

    Parameters
    ----------
    absorption : float
        k0 [cm^2/g] at the reference temperature and photon energy.
    temperature, photon : float
        The references T0 and h nu0 / k_B [K].
    temperature_exponent, photon_exponent : float
        n and m.
    scattering : float
        s [cm^2/g].
    inelastic : float
        Largest share of a group's scattering that moves photons to other groups, 0 to 1.
    broadening : float
        Standard deviation of the Gaussian in ln nu by which they are moved.
    """

    absorption: float = 1.0
    temperature: float = 1e8
    photon: float = 3e8
    temperature_exponent: float = 1.0
    photon_exponent: float = 1.0
    scattering: float = 0.2
    inelastic: float = 0.1
    broadening: float = 0.7

    def absorption_factors(self, groups: PhotonGroups) -> Floats:
        """k0 (nu/nu0)^-m of each group [cm^2/g]."""
        return np.asarray(self.absorption * (groups.centres / self.photon) ** -self.photon_exponent)

    def redistribution(self, groups: PhotonGroups) -> Floats:
        """Symmetric matrix M[to, from] of shares of the scattering that change the group; zero diagonal."""
        logs = np.log(groups.centres)
        shares = np.exp(-0.5 * ((logs[:, None] - logs[None, :]) / self.broadening) ** 2)
        np.fill_diagonal(shares, 0.0)
        largest = shares.sum(axis=0).max()
        return np.asarray(shares * (self.inelastic / largest if largest > 0.0 else 0.0))


@compiled
def planck_fractions(temperature: Floats, edges: Floats, fractions: Floats) -> None:
    """Write the share of black-body radiation in each group.

    Parameters
    ----------
    temperature : ndarray, shape (n_zones,)
        [K]; NaN gives NaN.
    edges : ndarray, shape (G - 1,)
        Boundaries between the groups, h nu / k_B [K], ascending.
    fractions : ndarray, shape (G, n_zones)
        Filled; not negative, and their sum is 1 to round-off.
    """
    n = temperature.size
    x = np.empty(n)
    scratch = np.empty((3, n))
    above = np.ones(n)
    tail = np.empty(n)
    for g in range(edges.size):
        for z in range(n):
            x[z] = edges[g] / temperature[z]
        upper_tail(x, tail, scratch)
        for z in range(n):
            share = above[z] - tail[z]
            fractions[g, z] = 0.0 if share < 0.0 else share
            above[z] = tail[z]
    fractions[edges.size] = above


@compiled
def upper_tail(x: Floats, tail: Floats, scratch: Floats) -> None:
    """Write the share of black-body radiation above x = h nu / (k_B T), to 1e-12.

    ``scratch`` has shape (3, n). A series that no element needs is skipped; that changes no bits.
    """
    smallest = np.inf
    largest = -np.inf
    for z in range(x.size):
        smallest = x[z] if x[z] < smallest else smallest
        largest = x[z] if x[z] > largest else largest
    tail[:] = x * 0.0
    if smallest < SPLIT:
        _low_series(x, tail, scratch[0], scratch[1])
    if largest >= SPLIT:
        _high_series(x, tail, scratch[0], scratch[1], scratch[2])


@inlined
def _low_series(x: Floats, tail: Floats, sums: Floats, squares: Floats) -> None:
    """Horner's rule term by term over all x, then the tail where x < SPLIT."""
    for z in range(x.size):
        bounded = x[z] if x[z] < SPLIT else SPLIT
        squares[z] = bounded * bounded
        sums[z] = _LOW[LOW_TERMS + 1]
    for term in range(LOW_TERMS, 1, -1):
        for z in range(x.size):
            sums[z] = sums[z] * squares[z] + _LOW[term]
    for z in range(x.size):
        cube = x[z] * squares[z]
        below = NORMALISATION * cube * ((sums[z] * squares[z] + _LOW[0]) + x[z] * _LOW[1])
        tail[z] = 1.0 - below if x[z] < SPLIT else tail[z]


@inlined
def _high_series(x: Floats, tail: Floats, sums: Floats, decay: Floats, work: Floats) -> None:
    """Sum over n of exp(-n x) (x^3/n + 3 x^2/n^2 + 6 x/n^3 + 6/n^4) by Horner's rule, where x >= SPLIT."""
    for z in range(x.size):
        sums[z] = -x[z]
    exponentials(sums, decay, work)
    sums[:] = 0.0
    for term in range(HIGH_TERMS, 0, -1):
        r = 1.0 / term
        for z in range(x.size):
            inner = x[z] * (x[z] * (x[z] + 3.0 * r) + 6.0 * r * r) + 6.0 * r * r * r
            sums[z] = (sums[z] + r * inner) * decay[z]
    for z in range(x.size):
        tail[z] = NORMALISATION * sums[z] if x[z] >= SPLIT else tail[z]
