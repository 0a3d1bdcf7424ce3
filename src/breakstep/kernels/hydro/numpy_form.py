"""The same sweep as ``hydro``, written once more on whole arrays.

This module is the oracle of the compiled kernel: no chunks, no scratch rows, no order of visiting, only
the scheme. Both must agree to the last bit, so each expression is evaluated in the same order. It
knows nothing of the compiled loops except, for the stellar mixture, the equation of state of one zone.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from breakstep.kernels.compiled import compiled
from breakstep.kernels.eos import GAMMA_LAW, mean_nuclear, state_from_energy

Array = npt.NDArray[np.float64]


@compiled
def _states(
    eos: Array, density: Array, energy: Array, partial: Array, mass_numbers: Array, charges: Array
) -> tuple[Array, Array]:
    """Pressure and gamma1 zone by zone, from flat arrays."""
    pressure, gamma1 = np.empty_like(density), np.empty_like(density)
    for i in range(density.size):
        abar, zbar = mean_nuclear(partial[:, i], mass_numbers, charges)
        state = state_from_energy(eos, density[i], energy[i], abar, zbar)
        pressure[i] = state[1]
        gamma1[i] = state[2]
    return pressure, gamma1


def _pressures(
    eos: Array,
    rho: Array,
    internal: Array,
    inverse: Array,
    partial: Array,
    mass_numbers: Array,
    charges: Array,
) -> tuple[Array, Array]:
    if eos[0] == GAMMA_LAW:
        return (eos[1] - 1.0) * internal, np.full_like(rho, eos[1])
    flat = np.ascontiguousarray(partial.reshape(partial.shape[0], rho.size))
    energy = internal * inverse
    pressure, gamma1 = _states(eos, rho.ravel(), energy.ravel(), flat, mass_numbers, charges)
    return pressure.reshape(rho.shape), gamma1.reshape(rho.shape)


def limited_differences(q: Array) -> Array:
    """Monotonized central differences along the first axis, for all but the two end zones."""
    left, right = q[1:-1] - q[:-2], q[2:] - q[1:-1]
    size = np.minimum(np.minimum(2.0 * np.abs(left), 2.0 * np.abs(right)), 0.5 * np.abs(left + right))
    size = np.where(left * right > 0.0, size, 0.0)
    return np.where(left > 0.0, size, -size)


def _half_step(
    half: float, gamma1: Array, rho: Array, velocity: Array, p: Array, e: Array, d: Array, keep: Array
) -> list[Array]:
    """Primitive variables half a time step later, where ``keep`` is 1."""
    step = keep * half
    squeeze = step * d[1]
    u_half = velocity[0] - step * d[4] * (1.0 / rho)
    return [
        rho - rho * squeeze,
        u_half,
        velocity[1],
        velocity[2],
        p - gamma1 * p * squeeze,
        e - (e + p) * squeeze,
    ]


def _face_states(half: float, gamma1: Array, primitive: list[Array]) -> tuple[list[Array], list[Array], Array, Array]:
    """States at the upper and lower faces, and the weights that made them, for all but the end zones."""
    d = np.array([limited_differences(q) for q in primitive])
    rho, u, v, w, p, e = (q[1:-1] for q in primitive)
    upper, lower = 0.5 - half * u, -0.5 - half * u
    bare = _half_step(half, gamma1, rho, np.array([u, v, w]), p, e, d, np.ones_like(rho))
    least = [np.minimum(bare[k] + upper * d[k], bare[k] + lower * d[k]) for k in (0, 4, 5)]
    spare = e - 0.25 * rho * (d[1] * d[1] + d[2] * d[2] + d[3] * d[3])
    least_of_all = np.minimum(np.minimum(least[0], least[1]), np.minimum(least[2], spare))
    keep = np.where(least_of_all > 0.0, 1.0, 0.0)
    upper, lower = upper * keep, lower * keep
    half_state = _half_step(half, gamma1, rho, np.array([u, v, w]), p, e, d, keep)
    at_upper = [q + upper * d[k] for k, q in enumerate(half_state)]
    at_lower = [q + lower * d[k] for k, q in enumerate(half_state)]
    return at_upper, at_lower, upper, lower


def _wave_speeds(left: list[Array], c2_l: Array, right: list[Array], c2_r: Array) -> tuple[Array, Array]:
    root_l, root_r = np.sqrt(left[0]), np.sqrt(right[0])
    weight = 1.0 / (root_l + root_r)
    jump = right[1] - left[1]
    mean = (root_l * left[1] + root_r * right[1]) * weight
    spread = np.sqrt(
        (root_l * c2_l + root_r * c2_r) * weight + 0.5 * (root_l * root_r) * (weight * weight) * (jump * jump)
    )
    return np.minimum(left[1] - np.sqrt(c2_l), mean - spread), np.maximum(right[1] + np.sqrt(c2_r), mean + spread)


def hllc(left: list[Array], gamma1_l: Array, right: list[Array], gamma1_r: Array) -> tuple[list[Array], Array]:
    """HLLC fluxes of mass, momentum (3) and energy, and the speed of the middle wave."""
    c2_l, c2_r = gamma1_l * left[4] / left[0], gamma1_r * right[4] / right[0]
    s_l, s_r = _wave_speeds(left, c2_l, right, c2_r)
    mass_l, mass_r = left[0] * (s_l - left[1]), right[0] * (s_r - right[1])
    middle = (right[4] - left[4] + mass_l * left[1] - mass_r * right[1]) / (mass_l - mass_r)
    up = middle >= 0.0
    rho, u, v, w, p, e = (np.where(up, a, b) for a, b in zip(left, right, strict=True))
    bound = np.where(up, s_l, s_r)
    clipped = np.where(up, np.minimum(s_l, 0.0), np.maximum(s_r, 0.0))
    total = e + 0.5 * rho * (u * u + v * v + w * w)
    narrow = 1.0 / (bound - middle)
    rho_star = rho * (bound - u) * narrow
    p_star = p + rho * (bound - u) * (middle - u)
    total_star = ((bound - u) * total - p * u + p_star * middle) * narrow
    mass = rho * u + clipped * (rho_star - rho)
    normal = rho * u * u + p + clipped * (rho_star * middle - rho * u)
    energy = (total + p) * u + clipped * (total_star - total)
    return [mass, normal, mass * v, mass * w, energy], middle


def _upwind(q: Array, to_upper: Array, to_lower: Array, middle: Array) -> Array:
    d = limited_differences(q)
    at_upper, at_lower = q[1:-1] + to_upper * d, q[1:-1] + to_lower * d
    return np.where(middle >= 0.0, at_upper[:-1], at_lower[1:])


def _species_fluxes(
    x: Array, total: Array, mass_flux: Array, to_upper: Array, to_lower: Array, middle: Array
) -> list[Array]:
    faces = [_upwind(q, to_upper, to_lower, middle) for q in x]
    face_sum = np.zeros_like(middle)
    for face in faces:
        face_sum = face_sum + face
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = np.where(face_sum > 0.0, _upwind(total, to_upper, to_lower, middle) / face_sum, 1.0)
    return [mass_flux * scale * face for face in faces]


def sweep(
    gas: Array, axis: int, dt: float, spacing: float, eos: Array, mass_numbers: Array, charges: Array
) -> tuple[Array, float]:
    """Advance a tile by one directional sweep; see ``hydro.sweep``.

    Returns
    -------
    new_gas : ndarray
        The interior after the time step.
    courant : float
        Largest (|u| + c) dt / spacing of the interior before the step.
    """
    order = [0, *(1 + (axis + k) % 3 for k in range(3)), *range(4, gas.shape[0])]
    lines = np.moveaxis(gas, 1 + axis, 1)[order]
    rho, momentum, energy, partial = lines[0], lines[1:4], lines[4], lines[5:]
    courant = dt / spacing
    inverse = 1.0 / rho
    velocity = momentum * inverse
    kinetic = 0.5 * (momentum[0] * velocity[0] + momentum[1] * velocity[1] + momentum[2] * velocity[2])
    internal = energy - kinetic
    p, gamma1 = _pressures(eos, rho, internal, inverse, partial, mass_numbers, charges)
    speed = np.abs(velocity[0]) + np.sqrt(gamma1 * p * inverse)
    at_upper, at_lower, to_upper, to_lower = _face_states(0.5 * courant, gamma1[1:-1], [rho, *velocity, p, internal])
    fluxes, middle = hllc([q[:-1] for q in at_upper], gamma1[1:-2], [q[1:] for q in at_lower], gamma1[2:-1])
    if len(partial):
        x = partial * inverse
        total = np.zeros_like(rho)
        for q in x:
            total = total + q
        fluxes += _species_fluxes(x, total, fluxes[0], to_upper, to_lower, middle)
    new = np.empty((gas.shape[0], *fluxes[0][1:].shape))
    for k, (component, flux) in enumerate(zip(order, fluxes, strict=True)):
        new[component] = lines[k, 2:-2] + courant * (flux[:-1] - flux[1:])
    return np.ascontiguousarray(np.moveaxis(new, 1, 1 + axis)), float(speed[2:-2].max() * courant)
