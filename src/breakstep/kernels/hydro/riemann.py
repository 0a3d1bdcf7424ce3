"""The formulas of one zone and one face: limited slope and HLLC flux.

This module knows scalars, and refuses to know arrays, axes and the order in which faces are visited: the
compiled sweep inlines these functions into its loops. Operations are written in the order in which
``numpy_form`` repeats them on whole arrays; the two must agree to the last bit, so neither may be
rearranged alone.
"""

from __future__ import annotations

import numpy as np

from breakstep.kernels.compiled import inlined


@inlined
def limited_difference(below: float, here: float, above: float) -> float:
    """Difference across a zone by the monotonized central limiter (van Leer 1977, J. Comput. Phys. 23, 276).

    Chosen over van Leer's harmonic mean because it needs no division and is the steepest of the usual
    symmetric limiters; it scales with its arguments, so proportional quantities keep their proportion.
    """
    left = here - below
    right = above - here
    size = min(min(2.0 * abs(left), 2.0 * abs(right)), 0.5 * abs(left + right))
    size = size if left * right > 0.0 else 0.0
    return size if left > 0.0 else -size


@inlined
def wave_speeds(rho_l: float, u_l: float, c2_l: float, rho_r: float, u_r: float, c2_r: float) -> tuple[float, float]:
    """Bounds on the signal speeds of a face: Einfeldt's (1988, SIAM J. Numer. Anal. 25, 294).

    With them HLLC keeps density and internal energy positive (Batten, Clarke, Lambert, Causon 1997,
    SIAM J. Sci. Comput. 18, 1553). They take sound speeds only, hence any equation of state.
    """
    root_l = np.sqrt(rho_l)
    root_r = np.sqrt(rho_r)
    weight = 1.0 / (root_l + root_r)
    jump = u_r - u_l
    mean = (root_l * u_l + root_r * u_r) * weight
    spread = np.sqrt(
        (root_l * c2_l + root_r * c2_r) * weight + 0.5 * (root_l * root_r) * (weight * weight) * (jump * jump)
    )
    return min(u_l - np.sqrt(c2_l), mean - spread), max(u_r + np.sqrt(c2_r), mean + spread)


@inlined
def contact_speed(
    rho_l: float, u_l: float, p_l: float, s_l: float, rho_r: float, u_r: float, p_r: float, s_r: float
) -> float:
    """Speed of the middle wave of HLLC (Toro, Riemann Solvers, section 10.4)."""
    mass_l = rho_l * (s_l - u_l)
    mass_r = rho_r * (s_r - u_r)
    return (p_r - p_l + mass_l * u_l - mass_r * u_r) / (mass_l - mass_r)


@inlined
def side_flux(
    rho: float,
    u: float,
    v: float,
    w: float,
    p: float,
    energy: float,
    bound: float,
    clipped: float,
    middle: float,
) -> tuple[float, float, float, float, float]:
    """HLLC flux from the state on the upwind side of the middle wave.

    Parameters
    ----------
    rho, u, v, w, p, energy : float
        State on that side; u is normal to the face, ``energy`` the internal energy density.
    bound : float
        Speed of the outer wave of that side.
    clipped : float
        The same, but 0 if the wave moves away from the face, whereupon the flux is that of the state.
    middle : float
        Speed of the middle wave.

    Returns
    -------
    tuple of 5 floats
        Fluxes of mass, of momentum (normal, first and second transverse) and of total energy.
    """
    total = energy + 0.5 * rho * (u * u + v * v + w * w)
    relative = bound - u
    narrow = 1.0 / (bound - middle)
    rho_star = rho * relative * narrow
    p_star = p + rho * relative * (middle - u)
    total_star = (relative * total - p * u + p_star * middle) * narrow
    mass = rho * u + clipped * (rho_star - rho)
    normal = rho * u * u + p + clipped * (rho_star * middle - rho * u)
    return mass, normal, mass * v, mass * w, (total + p) * u + clipped * (total_star - total)
