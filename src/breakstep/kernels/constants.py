"""Physical constants in cgs units.

This module knows numbers and where they come from; it refuses to know what they are used for.

Values are those of CODATA 2022 (Mohr, Newell, Taylor, Tiesinga, NIST Standard Reference Database 121).
The speed of light, Boltzmann's constant, Planck's constant and Avogadro's constant are exact by the 2019
definition of the SI; what is derived from them alone is exact but for rounding.
"""

from __future__ import annotations

import math

C_LIGHT = 2.99792458e10
"""Speed of light [cm/s], exact."""

K_B = 1.380649e-16
"""Boltzmann's constant [erg/K], exact."""

H_PLANCK = 6.62607015e-27
"""Planck's constant [erg s], exact."""

N_A = 6.02214076e23
"""Avogadro's constant [1/mol], exact."""

M_U = 1.66053906892e-24
"""Atomic mass constant [g], relative uncertainty 3e-10."""

GAS_CONSTANT = K_B * N_A
"""Molar gas constant k_B N_A [erg/(mol K)].

Kernels count the nuclei of mass number A in a gram as ``N_A / A``, as reaction rates do, so this is the
gas constant per gram and unit of mass number. It differs from ``K_B / M_U`` by 1e-9 of itself.
"""

A_RAD = 8.0 * math.pi**5 * K_B**4 / (15.0 * (C_LIGHT * H_PLANCK) ** 3)
"""Radiation constant [erg/(cm^3 K^4)], the energy density of black-body radiation over T^4."""
