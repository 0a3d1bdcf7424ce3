"""Equations of state of one zone: energy or temperature in, pressure and its derivatives out.

This module knows two equations of state and nothing of meshes, tiles or time. Compiled kernels receive
an equation of state as a vector of numbers (``GammaLaw(...).vector``), so that one compiled kernel
serves both kinds.

``gamma_law``
    p = (gamma - 1) rho e and T = p mu / (rho R).

``stellar``
    Ideal ions, black-body radiation (optional) and electrons in the closed form of Paczynski (1983,
    ApJ 267, 315). With y = rho Z/A, the density over the mean molecular weight per electron::

        P_end = R y T                       non-degenerate electrons
        P_ed  = K1 y^(5/3) / r              cold electrons, r^2 = 1 + (K1 y^(1/3) / K2)^2
        P_e^2 = P_end^2 + P_ed^2            the interpolation
        f     = dlnP_ed/dlnrho = 4/3 + 1 / (3 r^2)

    No pairs, no Coulomb corrections, no ionization. At the points checked (tests/physics/test_eos.py)
    P_e lies within 4.5 % of the exact Fermi-Dirac integral.

**The electrons' energy** departs from Paczynski's u_e = P_e / (f - 1). Because f varies with density,
that form is not the work of compression against P_ed: where f is near 3/2, compressing cold matter by
dlnrho asks for 22 % more energy than the pressure delivers, which the ions would pay for by cooling.
Used here instead is the integral of P_ed drho / rho^2, which has a closed form as well, plus
3/2 of the thermal part of the pressure::

    u_e = P_ed 3 r / (r + 1) + 3/2 (P_e - P_ed)

Both forms agree in the non-relativistic and extremely relativistic cold limits.

**What stays inconsistent.** No energy in closed form belongs to this P_e exactly. The Maxwell relation
P - rho^2 (de/drho)_T = T (dP/dT)_rho is violated by P_ed (1 - P_ed/P_e) (1 - 3/2 (f - 1)): nothing for
cold, for non-relativistic and for non-degenerate electrons, and never more than P_e / 8. Hence
``gamma1`` is not taken from the identity chi_rho + chi_T^2 P / (rho T c_v), which rests on that relation,
but from ::

    gamma1 P / rho = (dP/drho)_e + (P / rho^2) (dP/de)_rho,

which is the squared characteristic speed of the Euler equations closed by this P(rho, e) and equals the
identity wherever the relation holds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from breakstep.kernels.compiled import inlined
from breakstep.kernels.constants import A_RAD, GAS_CONSTANT

Array = npt.NDArray[np.float64]

GAMMA_LAW = 0.0
STELLAR = 1.0

K_NONRELATIVISTIC = 9.91e12
"""Cold pressure over (rho/mu_e)^(5/3) [cgs]: Paczynski (1983)."""
K_RELATIVISTIC = 1.231e15
"""Cold pressure over (rho/mu_e)^(4/3) [cgs]: Paczynski (1983)."""

NEWTON_ITERATIONS = 5
"""Newton steps for the temperature of gas plus radiation, always all of them.

The start is at most 1.3803 times the root (reached where radiation and an ideal gas hold x^4 and x of the
energy, x^4 + x = 1), the function is convex and increasing, and the relative errors of the worst case fall
as 0.38, 0.10, 9e-3, 8e-5, 6e-9, 7e-16. A fixed number keeps the loop over zones free of branches.
"""


@dataclass(frozen=True)
class GammaLaw:
    """Ideal gas with a constant ratio of specific heats.

    Parameters
    ----------
    gamma : float
        Ratio of specific heats, above 1.
    mean_molecular_weight : float
        Grams a mole of particles, above 0; only the temperature depends on it.
    """

    gamma: float
    mean_molecular_weight: float = 1.0

    @property
    def vector(self) -> Array:
        """The parameters as kernels take them: kind, gamma, mean molecular weight."""
        return np.array([GAMMA_LAW, self.gamma, self.mean_molecular_weight])


@dataclass(frozen=True)
class Stellar:
    """Ideal ions, degenerate electrons and, unless it is transported separately, radiation.

    Parameters
    ----------
    radiation : bool
        Whether pressure and energy include black-body radiation at the matter's temperature.
    """

    radiation: bool = True

    @property
    def vector(self) -> Array:
        """The parameters as kernels take them: kind, radiation constant (0 without), nothing."""
        return np.array([STELLAR, A_RAD if self.radiation else 0.0, 0.0])


@inlined
def mean_nuclear(partial_densities: Array, mass_numbers: Array, charges: Array) -> tuple[float, float]:
    """Mean mass number and mean charge of the nuclei, each nucleus counted once.

    Parameters
    ----------
    partial_densities : ndarray, shape (n_species,)
        Partial densities rho X_k [g/cm^3], or mass fractions: a common factor drops out.
    mass_numbers, charges : ndarray, shape (n_species,)

    Returns
    -------
    abar, zbar : float
        sum(X) / sum(X/A) and sum(X Z/A) / sum(X/A); (1, 1) without species.
    """
    mass = 0.0
    nuclei = 0.0
    electrons = 0.0
    for k in range(mass_numbers.size):
        moles = partial_densities[k] / mass_numbers[k]
        mass += partial_densities[k]
        nuclei += moles
        electrons += moles * charges[k]
    if mass_numbers.size == 0:
        mass = nuclei = electrons = 1.0
    return mass / nuclei, electrons / nuclei


@inlined
def electron_pressures(density: float, temperature: float, ye: float) -> tuple[float, float, float, float]:
    """Electron pressure in Paczynski's closed form.

    Parameters
    ----------
    density, temperature : float
        [g/cm^3], [K].
    ye : float
        Moles of electrons a gram, Z/A, the inverse of the mean molecular weight per electron.

    Returns
    -------
    p_end, p_ed, p_e, f : float
        Non-degenerate, cold and interpolated pressure [erg/cm^3]; dlnp_ed/dlnrho.
    """
    r, p_ed = _cold_electrons(density * ye)
    p_end = GAS_CONSTANT * density * ye * temperature
    return p_end, p_ed, np.sqrt(p_end * p_end + p_ed * p_ed), (4.0 + 1.0 / (r * r)) / 3.0


@inlined
def _cold_electrons(y: float) -> tuple[float, float]:
    """The relativity measure r and the cold pressure [erg/cm^3] at y = density * ye.

    The added 1e-100 changes no bit of any real pressure; without it matter of neutrons alone would
    divide 0 by 0.
    """
    root = np.cbrt(y)
    q = K_NONRELATIVISTIC / K_RELATIVISTIC * root
    r = np.sqrt(1.0 + q * q)
    return r, K_NONRELATIVISTIC * (root * root) * y / r + 1e-100


@inlined
def gas_temperature(thermal: float, ions: float, electrons: float, p_ed: float) -> float:
    """Solve ions T + sqrt((electrons T)^2 + p_ed^2) - p_ed = thermal, a quadratic, without cancellation.

    Parameters
    ----------
    thermal : float
        Two thirds of the thermal energy density [erg/cm^3].
    ions, electrons : float
        Ideal pressures per kelvin [erg/(cm^3 K)].
    p_ed : float
        Pressure of cold electrons [erg/cm^3].
    """
    product = thermal * (thermal + 2.0 * p_ed)
    root: float = np.sqrt(electrons * electrons * product + ions * ions * (p_ed * p_ed))
    return product / (ions * (thermal + p_ed) + root)


@inlined
def _newton_step(a_rad: float, ions: float, electrons: float, p_ed: float, thermal: float, temperature: float) -> float:
    """One Newton step on the thermal energy density, multiplied out so as to need a single division."""
    p_end = electrons * temperature
    p_e: float = np.sqrt(p_end * p_end + p_ed * p_ed)
    both = p_e + p_ed  # P_e - P_ed is p_end^2 / both, without cancellation
    cubed = a_rad * (temperature * temperature * temperature)
    missing = thermal - cubed * temperature
    excess = (1.5 * (ions * temperature * both + p_end * p_end) - missing * both) * p_e
    slope = (1.5 * (ions * p_e + electrons * p_end) + 4.0 * cubed * p_e) * both
    return temperature - excess / slope


@inlined
def stellar_temperature(a_rad: float, density: float, specific_energy: float, abar: float, zbar: float) -> float:
    """Temperature [K] of the stellar mixture; nan where the energy does not exceed that at T = 0."""
    ions = GAS_CONSTANT * density / abar
    electrons = ions * zbar
    r, p_ed = _cold_electrons(density * (zbar / abar))
    thermal = density * specific_energy - p_ed * (3.0 * r / (r + 1.0))
    if not thermal > 0.0:
        thermal = np.nan
    temperature = gas_temperature(thermal / 1.5, ions, electrons, p_ed)
    if a_rad > 0.0:
        temperature = min(temperature, np.sqrt(np.sqrt(thermal / a_rad)))
        for _ in range(NEWTON_ITERATIONS):
            temperature = _newton_step(a_rad, ions, electrons, p_ed, thermal, temperature)
    return temperature


@inlined
def stellar_state(
    a_rad: float, density: float, temperature: float, abar: float, zbar: float
) -> tuple[float, float, float, float]:
    """Specific energy, pressure, gamma1 and heat capacity of the stellar mixture."""
    ions = GAS_CONSTANT * density / abar
    electrons = ions * zbar
    r, p_ed = _cold_electrons(density * (zbar / abar))
    p_end = electrons * temperature
    p_e = np.sqrt(p_end * p_end + p_ed * p_ed)
    p_ion = ions * temperature
    cubed = a_rad * (temperature * temperature * temperature)
    u_rad = cubed * temperature
    pressure = p_ion + p_e + u_rad / 3.0
    thermal_e = p_end * p_end / (p_e + p_ed)  # P_e - P_ed without cancellation
    energy = 1.5 * (p_ion + thermal_e) + p_ed * (3.0 * r / (r + 1.0)) + u_rad
    dp_dt = ions + electrons * p_end / p_e + 4.0 * cubed / 3.0
    du_dt = 1.5 * (ions + electrons * p_end / p_e) + 4.0 * cubed
    f = (4.0 + 1.0 / (r * r)) / 3.0
    dp_dlnrho = p_ion + (p_end * p_end + f * (p_ed * p_ed)) / p_e
    # pressure - rho^2 (de/drho)_T, term by term: ions, electrons, radiation
    work = p_ion + thermal_e * (1.0 + 1.5 * (f - 1.0) * p_ed / p_e) + 4.0 * u_rad / 3.0
    gamma1 = (dp_dlnrho + dp_dt / du_dt * work) / pressure
    return energy / density, pressure, gamma1, du_dt / density


@inlined
def state_from_temperature(
    eos: Array, density: float, temperature: float, abar: float, zbar: float
) -> tuple[float, float, float, float]:
    """Specific energy, pressure, gamma1 and heat capacity from density and temperature.

    Parameters
    ----------
    eos : ndarray, shape (3,)
        ``GammaLaw(...).vector`` or ``Stellar(...).vector``.
    density, temperature : float
        [g/cm^3], [K]; both positive.
    abar, zbar : float
        Mean mass number and charge of the nuclei (``mean_nuclear``); the gamma law ignores them.

    Returns
    -------
    specific_energy : float
        [erg/g]
    pressure : float
        [erg/cm^3]
    gamma1 : float
        The sound speed squared is gamma1 * pressure / density.
    heat_capacity : float
        (de/dT) at constant density [erg/(g K)], the exact derivative of ``specific_energy``.
    """
    if eos[0] == GAMMA_LAW:
        heat_capacity = GAS_CONSTANT / (eos[2] * (eos[1] - 1.0))
        energy = heat_capacity * temperature
        result = (energy, (eos[1] - 1.0) * density * energy, eos[1], heat_capacity)
    else:
        result = stellar_state(eos[1], density, temperature, abar, zbar)
    return result


@inlined
def state_from_energy(
    eos: Array, density: float, specific_energy: float, abar: float, zbar: float
) -> tuple[float, float, float, float]:
    """Temperature, pressure, gamma1 and heat capacity from density and specific internal energy.

    A pure function of its arguments: no start value, no history. Parameters and units as in
    ``state_from_temperature``.

    Returns
    -------
    temperature, pressure, gamma1, heat_capacity : float
        The temperature is nan where there is no solution: the energy is not positive, or, for the
        stellar mixture, not above that of cold electrons. (The pressure is then nan too for the stellar
        mixture.)
    """
    if eos[0] == GAMMA_LAW:
        heat_capacity = GAS_CONSTANT / (eos[2] * (eos[1] - 1.0))
        temperature = specific_energy / heat_capacity if specific_energy > 0.0 else np.nan
        result = (temperature, (eos[1] - 1.0) * density * specific_energy, eos[1], heat_capacity)
    else:
        temperature = stellar_temperature(eos[1], density, specific_energy, abar, zbar)
        state = stellar_state(eos[1], density, temperature, abar, zbar)
        result = (temperature, state[1], state[2], state[3])
    return result
