"""From the tables of a scenario to a problem: mesh, gas, layout, steps and their order.

This is the only module of the package's input side that knows the step factories. Functions here read
tables by attribute only, so they serve a checked file and the sound part of a faulty one alike.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from breakstep.errors import DeclarationError
from breakstep.kernels.burning.network import load_network
from breakstep.kernels.burning.network_layout import MEV
from breakstep.kernels.constants import K_B
from breakstep.kernels.eos import GammaLaw, Stellar
from breakstep.kernels.transport.opacity import PhotonGroups, PowerLawOpacity
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import AXIS_NAMES, Edge, Mesh
from breakstep.scenario.initial import InitialState, gas_values, radiation_values, temperature_at
from breakstep.scenario.layouts import Blast, Layout, RadiationSlab, Riemann, Spot, Spots, State, Uniform
from breakstep.scenario.model import ScenarioFile
from breakstep.scenario.rehearsed import is_timed_alone, timed_fields, timed_items, timed_problem
from breakstep.scenario.states import edge_key, edges
from breakstep.steps.burning import Burning, burn
from breakstep.steps.hydro import Gas, gas_field, sweep
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Reduction
from breakstep.steps.splitting import Item, Repeat, Splitting, alternating, lie, strang
from breakstep.steps.timestep import time_is_up, time_step
from breakstep.steps.transport import Transport, transport_fields, transport_items

KELVIN_PER_KEV = 1e-3 * MEV / K_B
"""Photon energies as h nu / k_B: kelvin in a kilo-electronvolt."""


def build_problem(file: ScenarioFile) -> Problem:
    """The problem that a checked scenario describes.

    Raises
    ------
    DeclarationError, TilingError
        Its parts do not fit together.
    """
    if is_timed_alone(file):
        return timed_problem(file, build_mesh(file.mesh), build_time_step(file, build_gas(file)))
    gas = build_gas(file)
    transport = None if file.transport is None else build_transport(file.transport)
    dt = build_time_step(file, gas)
    return Problem(
        name=file.name,
        title=file.title or file.name,
        mesh=build_mesh(file.mesh),
        fields=_fields(file, gas, transport),
        splitting=_splitting(file, _local_steps(file, gas), _transport_items(file, gas, transport), [dt]),
        initial=InitialState(build_layout(file, gas), gas, None if transport is None else transport.groups),
        cycles=file.run.cycles,
        ended=None if file.run.end_time is None else time_is_up,
    )


def build_mesh(table: Any) -> Mesh:
    """The mesh of ``[mesh]``."""
    pairs = [getattr(table.edges, name) for name in AXIS_NAMES[: len(table.zones)]]
    return Mesh(
        shape=table.zones,
        spacing=tuple(length / zones for length, zones in zip(table.size, table.zones, strict=True)),
        edges=tuple((Edge(low), Edge(high)) for low, high in pairs),
    )


def build_gas(file: Any) -> Gas:
    """Equation of state and species, from ``[eos]`` and from the network or ``[species]``."""
    return Gas(build_eos(file.eos), *species_of(file))


def build_eos(table: Any) -> GammaLaw | Stellar:
    """The equation of state of ``[eos]``."""
    if table.kind == "gamma_law":
        return GammaLaw(table.gamma, table.mean_molecular_weight)
    return Stellar(table.radiation)


def species_of(file: Any) -> tuple[tuple[str, ...], tuple[float, ...], tuple[float, ...]]:
    """Names, mass numbers and charges of the species that the gas carries."""
    table = file.burning if file.burning is not None else file.species
    if table is not None and table.network is not None:
        network = load_network(table.network)
        return network.names, tuple(network.mass_numbers.tolist()), tuple(network.charges.tolist())
    if table is not None:
        return file.species.names, file.species.mass_numbers, file.species.charges
    return (), (), ()


def build_transport(table: Any) -> Transport:
    """The parameters of ``[transport]``, photon energies in kelvin."""
    opacity = table.opacity
    return Transport(
        groups=PhotonGroups(
            table.groups,
            table.lowest_photon_energy * KELVIN_PER_KEV,
            table.highest_photon_energy * KELVIN_PER_KEV,
        ),
        opacity=PowerLawOpacity(
            absorption=opacity.absorption,
            temperature=opacity.reference_temperature,
            photon=opacity.reference_photon_energy * KELVIN_PER_KEV,
            temperature_exponent=opacity.temperature_exponent,
            photon_exponent=opacity.photon_exponent,
            scattering=opacity.scattering,
            inelastic=opacity.inelastic,
            broadening=opacity.broadening,
        ),
        tolerance=table.tolerance,
        at_most=table.at_most,
        lag=table.lag,
        sweeps_per_exchange=table.sweeps_per_exchange,
        omega=table.omega,
    )


def build_time_step(file: Any, gas: Gas) -> Reduction:
    """The reduction ``dt``."""
    table = file.time_step
    return time_step(
        gas if file.hydro is not None else None,
        cfl=table.cfl,
        lag=table.lag,
        growth=table.growth,
        first=table.first,
        maximum=table.maximum,
        end_time=file.run.end_time,
    )


def _fields(file: ScenarioFile, gas: Gas, transport: Transport | None) -> tuple[Field, ...]:
    states = {
        edge: build_state(table, gas)
        for edge in edges(len(file.mesh.zones))
        if (table := getattr(file.fixed, edge_key(*edge))) is not None
    }
    fields = [gas_field(gas, {edge: gas_values(gas, state) for edge, state in states.items()})]
    if transport is not None:
        beyond = {edge: radiation_values(transport.groups, state) for edge, state in states.items()}
        fields.extend(transport_fields(transport, len(file.mesh.zones), beyond))
    fields.extend(timed_fields(file, build_mesh(file.mesh)))
    return tuple(fields)


def _local_steps(file: ScenarioFile, gas: Gas) -> list[Item]:
    """Sweeps axis by axis, then burning; steps by timer behind those that they follow."""
    steps: list[Item] = []
    timed = timed_items(file, build_mesh(file.mesh), "local", ("dt",))
    if file.hydro is not None:
        steps.extend(sweep(gas, axis) for axis in range(len(file.mesh.zones)))
    steps.extend(timed.get("hydro", ()))
    if file.burning is not None:
        table = file.burning
        limits = (table.relative_tolerance, table.absolute_tolerance, table.sub_step_limit)
        steps.append(burn(gas, Burning(table.network, *limits, table.cutoff_temperature)))
    return [*steps, *timed.get("burning", ())]


def _transport_items(file: ScenarioFile, gas: Gas, transport: Transport | None) -> list[Item]:
    if transport is None:
        return []
    timed = timed_items(file, build_mesh(file.mesh), "radiation", ("dt",))
    return [*transport_items(gas, transport, len(file.mesh.zones)), *timed.get("transport", ())]


def _splitting(
    file: ScenarioFile, local: list[Item], radiation: list[Item], reductions: Sequence[Reduction]
) -> Splitting:
    """The order of steps; assemble, solve and exchange keep theirs and never come in halves."""
    if file.run.splitting == "lie":
        return lie([*local, *radiation], reductions)
    if file.run.splitting == "alternating":
        return alternating(
            [*local, *radiation], reductions, swap=lambda items: [*radiation, *reversed(items[: len(local)])]
        )
    if not radiation:
        return strang(local, reductions)
    halves = [_half(item) for item in local]
    return Splitting(((*halves, *radiation, *reversed(halves)),), tuple(reductions))


def _half(item: Item) -> Item:
    if isinstance(item, Repeat):
        raise DeclarationError(f"repeat {item.name!r} cannot be done in halves")
    return replace(item, fraction=0.5 * item.fraction)


def build_state(table: Any, gas: Gas) -> State:
    """A state with its temperature; NaN where no temperature gives the pressure asked for."""
    fractions = build_fractions(table.composition, gas)
    temperature = table.temperature
    if temperature is None:
        eos, mass_numbers, charges = gas.arrays
        shares = np.array(fractions)
        temperature = float(temperature_at(eos, table.density, table.pressure, shares, mass_numbers, charges))
    u, v, w = (*table.velocity, 0.0, 0.0)[:3]
    return State(table.density, temperature, (u, v, w), fractions, table.radiation_temperature)


def build_fractions(composition: Mapping[str, float], gas: Gas) -> tuple[float, ...]:
    """Mass fractions in the order of the species, scaled to sum to 1 to round-off."""
    total = sum(composition.values())
    return tuple(composition.get(name, 0.0) / total for name in gas.species)


def build_layout(file: ScenarioFile, gas: Gas) -> Layout:
    """The layout of ``[initial]``."""
    table: Any = file.initial
    return _LAYOUTS[table.kind](table, gas, build_mesh(file.mesh))


def _uniform(table: Any, gas: Gas, mesh: Mesh) -> Layout:
    return Uniform(build_state(table, gas))


def _spots(table: Any, gas: Gas, mesh: Mesh) -> Layout:
    return Spots(build_state(table, gas), tuple(_spot(spot, gas) for spot in table.spots))


def _spot(table: Any, gas: Gas) -> Spot:
    composition = table.composition
    return Spot(
        centre=table.centre,
        radius=table.radius,
        fade=table.fade,
        temperature=table.temperature,
        density=table.density,
        fractions=None if composition is None else build_fractions(composition, gas),
    )


def _riemann(table: Any, gas: Gas, mesh: Mesh) -> Layout:
    axis = AXIS_NAMES.index(table.axis)
    return Riemann(axis, table.position, build_state(table.left, gas), build_state(table.right, gas))


def _blast(table: Any, gas: Gas, mesh: Mesh) -> Layout:
    middle = tuple(0.5 * n * dx for n, dx in zip(mesh.shape, mesh.spacing, strict=True))
    centre = middle if table.centre is None else table.centre
    return Blast(build_state(table, gas), centre, table.radius, table.energy)


def _radiation_slab(table: Any, gas: Gas, mesh: Mesh) -> Layout:
    axis = AXIS_NAMES.index(table.axis)
    return RadiationSlab(build_state(table, gas), axis, table.begins, table.ends, table.slab_temperature)


_LAYOUTS = {
    "uniform": _uniform,
    "spots": _spots,
    "riemann": _riemann,
    "blast": _blast,
    "radiation_slab": _radiation_slab,
}
