"""A small driver for the tests of the sweep: fills halos, picks time steps, alternates axes.

It stands in for the engine, so that the kernels can be tested alone.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

from breakstep.kernels.eos import GammaLaw
from breakstep.kernels.hydro import sweep as hydro

Array = npt.NDArray[np.float64]
Fill = Callable[[Array, int], Array]

NO_SPECIES = np.zeros(0)


def gas_from_primitive(rho: Array, velocity: Array, p: Array, gamma: float) -> Array:
    """Conserved gas array of a gamma law without species, shape (5, nx, ny, nz)."""
    total = p / (gamma - 1.0) + 0.5 * rho * (velocity**2).sum(axis=0)
    return np.concatenate([rho[None], rho * velocity, total[None]])


def primitive(gas: Array, gamma: float) -> tuple[Array, Array, Array]:
    """Density, velocity (3) and pressure of a gamma-law gas array."""
    velocity = gas[1:4] / gas[0]
    return gas[0], velocity, (gamma - 1.0) * (gas[4] - 0.5 * (gas[1:4] * velocity).sum(axis=0))


def periodic(gas: Array, axis: int) -> Array:
    """Halo of two zones along ``axis`` from the other end."""
    widths = [(2, 2) if a == axis + 1 else (0, 0) for a in range(4)]
    return np.pad(gas, widths, mode="wrap")


def outflow(gas: Array, axis: int) -> Array:
    """Halo that repeats the last zone."""
    widths = [(2, 2) if a == axis + 1 else (0, 0) for a in range(4)]
    return np.pad(gas, widths, mode="edge")


def reflecting(gas: Array, axis: int) -> Array:
    """Halo that mirrors the gas, its normal momentum turned round."""
    widths = [(2, 2) if a == axis + 1 else (0, 0) for a in range(4)]
    padded = np.pad(gas, widths, mode="symmetric")
    ends = np.moveaxis(padded[1 + axis], axis, 0)
    ends[:2] *= -1.0
    ends[-2:] *= -1.0
    return padded


def march(
    gas: Array,
    *,
    spacing: float,
    end: float,
    eos: Array,
    fill: Fill,
    cfl: float = 0.8,
    first: float = np.inf,
    mass_numbers: Array = NO_SPECIES,
    charges: Array = NO_SPECIES,
) -> Array:
    """Advance to the time ``end`` by sweeps along each axis of more than one zone, their order alternating.

    ``first`` bounds the first time step, each later one at most doubles: the usual start from a blast.
    """
    axes = [axis for axis in range(3) if gas.shape[1 + axis] > 1]
    active = np.array([axis in axes for axis in range(3)])
    time, step, previous = 0.0, 0, 0.5 * first
    while time < end:
        rate, bad = hydro.signal_rate(gas, np.full(3, spacing), active, eos, mass_numbers, charges)
        assert bad == -1
        dt = min(cfl / rate, end - time, 2.0 * previous)
        for axis in axes if step % 2 == 0 else axes[::-1]:
            gas, courant, bad = hydro.sweep(fill(gas, axis), axis, dt, spacing, eos, mass_numbers, charges)
            assert bad == -1
            assert courant <= 1.0
        time, step, previous = time + dt, step + 1, dt
    return gas


def gamma_law(gamma: float) -> Array:
    """The gamma law's vector."""
    return GammaLaw(gamma).vector
