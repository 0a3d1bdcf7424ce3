"""Kinetics for tests: published stiff problems as mass-action networks, and tiles of burning zones."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.burning.network import Network, Reaction, Species, build_network
from breakstep.kernels.burning.network_layout import read_only
from breakstep.kernels.burning.stiff import integrate, stiff_scratch
from breakstep.kernels.burning.zone_equations import Zone
from breakstep.kernels.eos import state_from_temperature
from breakstep.kernels.unmanaged import unmanaged

Floats = NDArray[np.float64]

TEMPERATURE = 1e9  # of problems whose rates do not depend on it
CUTOFF = 6e8


def abstract_species(*names: str) -> list[Species]:
    """Species whose abundance is its own mass fraction."""
    return [Species(name, 1.0, 0.0) for name in names]


def robertson() -> Network:
    """Robertson's problem (1966), as in the IVP test set of Mazzia and Magherini."""
    reactions = [
        Reaction(("y1",), ("y2",), 0.04),
        Reaction(("y2", "y3"), ("y1", "y3"), 1e4),
        Reaction(("y2", "y2"), ("y2", "y3"), 3e7),
    ]
    return build_network("robertson", abstract_species("y1", "y2", "y3"), reactions)


def hires() -> Network:
    """HIRES (Schaefer 1975), as in the IVP test set: eight species, and a source of the first."""
    linear = (
        ("y1", "y2", 1.71),
        ("y2", "y1", 0.43),
        ("y2", "y4", 8.32),
        ("y3", "y1", 8.32),
        ("y3", "y4", 1.71),
        ("y4", "y3", 0.43),
        ("y4", "y6", 0.69),
        ("y5", "y3", 0.035),
        ("y5", "y6", 1.71),
        ("y6", "y5", 0.43),
    )
    reactions = [Reaction((source,), (sink,), rate) for source, sink, rate in linear]
    reactions += [
        Reaction((), ("y1",), 0.0007),
        Reaction(("y6", "y8"), ("y7",), 280.0),
        Reaction(("y7",), ("y5", "y8"), 0.43),
        Reaction(("y7",), ("y6", "y8"), 0.69),
        Reaction(("y7",), ("y8",), 0.69),
    ]
    return build_network("hires", abstract_species(*(f"y{i}" for i in range(1, 9))), reactions)


def oregonator() -> Network:
    """OREGO (Field & Noyes 1974), as in the IVP test set; each term is a reaction of its own."""
    s, w, q = 77.27, 0.161, 8.375e-6
    reactions = [
        Reaction(("y2",), ("y1", "y2"), s),
        Reaction(("y1",), ("y1", "y1"), s),
        Reaction(("y1", "y1"), ("y1",), s * q),
        Reaction(("y1", "y2"), ("y2",), s),
        Reaction(("y1", "y2"), ("y1",), 1.0 / s),
        Reaction(("y3",), ("y2", "y3"), 1.0 / s),
        Reaction(("y2",), (), 1.0 / s),
        Reaction(("y1",), ("y1", "y3"), w),
        Reaction(("y3",), (), w),
    ]
    return build_network("oregonator", abstract_species("y1", "y2", "y3"), reactions)


@dataclass(frozen=True)
class Integration:
    """What `run` returns: the outcome's code, the state, and the counters of `integrate`."""

    outcome: int
    state: Floats
    counters: NDArray[np.int64]

    @property
    def abundances(self) -> Floats:
        """The state without its temperature."""
        return self.state[:-1]


def run(
    network: Network,
    abundances: Floats | tuple[float, ...],
    duration: float,
    rtol: float,
    atol: float,
    *,
    temperature: float = TEMPERATURE,
    density: float = 1.0,
    eos: Floats | None = None,
    max_substeps: int = 1_000_000,
) -> Integration:
    """Integrate one zone; at fixed temperature unless an equation of state is given."""
    molar = np.array(abundances, dtype=np.float64)
    vector = read_only(np.zeros(3) if eos is None else eos)
    zone = Zone(vector, float(density), float(molar @ network.charges), eos is not None)
    state, counters = np.append(molar, temperature), np.zeros(7, dtype=np.int64)
    scratch = stiff_scratch(network.arrays)
    limits = (float(duration), float(rtol), float(atol), max_substeps)
    outcome = integrate(network.arrays, zone, state, *limits, scratch, counters)
    return Integration(outcome, state, counters)


@unmanaged
def _energy(eos: Floats, density: float, temperature: float, abar: float, zbar: float) -> float:
    return state_from_temperature(eos, density, temperature, abar, zbar)[0]


def specific_energy(network: Network, eos: Floats, density: float, state: Floats) -> float:
    """Internal energy [erg/g] of a state (molar abundances, temperature)."""
    nuclei = float(state[:-1].sum())
    electrons = float(state[:-1] @ network.charges)
    return _energy(read_only(eos), float(density), float(state[-1]), 1.0 / nuclei, electrons / nuclei)


def tile(network: Network, eos: Floats, density: Floats, temperature: Floats, fractions: Floats) -> Floats:
    """Conserved variables of a tile, with some velocity in every zone.

    Parameters
    ----------
    density, temperature : ndarray, shape (nx, ny, nz)
    fractions : ndarray, shape (n_species, nx, ny, nz)
    """
    gas = np.empty((5 + len(network.names), *density.shape))
    gas[0] = density
    gas[1], gas[2], gas[3] = 1e8 * density, -3e7 * density, 2e6 * density
    kinetic = 0.5 * (gas[1] ** 2 + gas[2] ** 2 + gas[3] ** 2) / density
    for zone in np.ndindex(density.shape):
        molar = fractions[(slice(None), *zone)] / network.mass_numbers
        state = np.append(molar, temperature[zone])
        gas[(4, *zone)] = density[zone] * specific_energy(network, eos, density[zone], state)
    gas[4] += kinetic
    gas[5:] = density * fractions
    return gas


def one_zone(network: Network, eos: Floats, density: float, temperature: float, **fractions: float) -> Floats:
    """A tile of one zone; mass fractions by species name."""
    x = np.array([fractions.get(name, 0.0) for name in network.names])
    shape = (1, 1, 1)
    return tile(network, eos, np.full(shape, density), np.full(shape, temperature), x.reshape(-1, *shape))
