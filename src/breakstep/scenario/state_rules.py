"""Rules for states and how they are laid out: that they can be, and that they lie in the mesh.

As in ``rules``, each rule looks at the sound part of a file and is silent where that is not enough.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import partial
from typing import Any

import numpy as np

from breakstep.mesh.mesh import AXIS_NAMES
from breakstep.scenario.build import build_gas, build_state, species_of
from breakstep.scenario.faults import Fault, did_you_mean, join
from breakstep.scenario.reading import Rule, apply_rules
from breakstep.scenario.states import (
    BlastSection,
    RadiationSlabSection,
    RiemannSection,
    SpotsSection,
    StateSection,
    edge_key,
    edges,
)

SUM_TOLERANCE = 1e-6
"""How far mass fractions may sum from 1: six written digits. They are then scaled to 1."""


def _initial_state(file: Any) -> Iterator[Fault]:
    if file.initial.is_a(StateSection):
        yield from _state_faults("initial", file.initial, file)


def _left_state(file: Any) -> Iterator[Fault]:
    if file.initial.is_a(RiemannSection):
        yield from _state_faults("initial.left", file.initial.left, file)


def _right_state(file: Any) -> Iterator[Fault]:
    if file.initial.is_a(RiemannSection):
        yield from _state_faults("initial.right", file.initial.right, file)


def _fixed_edge(axis: int, side: int, file: Any) -> Iterator[Fault]:
    key, name = edge_key(axis, side), AXIS_NAMES[axis]
    is_given = getattr(file.fixed, key) is not None
    is_fixed = axis < len(file.mesh.zones) and getattr(file.mesh.edges, name)[side] == "fixed"
    if is_fixed and not is_given:
        yield Fault(f"fixed.{key}", "is missing; expected the state beyond this fixed edge")
    if is_given and not is_fixed:
        yield Fault(f"fixed.{key}", f'this edge is not fixed; set mesh.edges.{name} to "fixed" or leave this out')


def _fixed_state(axis: int, side: int, file: Any) -> Iterator[Fault]:
    key = edge_key(axis, side)
    table = getattr(file.fixed, key)
    if table is not None:
        yield from _state_faults(f"fixed.{key}", table, file)


StateRule = Callable[[str, Any, Any], Iterator[Fault]]


def _state_faults(path: str, table: Any, file: Any) -> list[Fault]:
    return apply_rules([partial(rule, path, table) for rule in _ONE_STATE], file)


def _one_of_two(path: str, table: Any, file: Any) -> Iterator[Fault]:
    if table.temperature is None and table.pressure is None:
        yield Fault(join(path, "temperature"), "is missing; expected a temperature [K] or a pressure [erg/cm^3]")
    if table.temperature is not None and table.pressure is not None:
        yield Fault(join(path, "pressure"), "expected a temperature or a pressure, came both")


def _pressure_can_be(path: str, table: Any, file: Any) -> Iterator[Fault]:
    if table.pressure is None or table.temperature is not None or any(_composition(path, table, file)):
        return
    gas = build_gas(file)
    if np.isnan(build_state(table, gas).temperature):
        yield Fault(
            join(path, "pressure"),
            f"no temperature gives {table.pressure:g} erg/cm^3 at a density of {table.density:g} g/cm^3; cold"
            " electrons alone press harder, or it is out of range",
        )


def _composition(path: str, table: Any, file: Any) -> Iterator[Fault]:
    yield from _composition_faults(join(path, "composition"), table.composition, species_of(file)[0])


def _composition_faults(key: str, composition: dict[str, float], species: tuple[str, ...]) -> Iterator[Fault]:
    if not species and composition:
        yield Fault(key, "the gas has no species; add [burning] or [species], or leave this out")
        return
    if species and not composition:
        yield Fault(key, f"is missing; expected mass fractions of {', '.join(species)} that sum to 1")
        return
    for name in composition:
        if name not in species:
            yield Fault(join(key, name), f"unknown species{did_you_mean(name, species)}")
    total = sum(composition.values())
    if species and abs(total - 1.0) > SUM_TOLERANCE:
        yield Fault(key, f"expected mass fractions that sum to 1, came a sum of {total:.8g}")


def _radiation_is_there(path: str, table: Any, file: Any) -> Iterator[Fault]:
    if table.radiation_temperature is not None and file.transport is None:
        yield Fault(join(path, "radiation_temperature"), "there is no radiation without [transport]; leave this out")


_ONE_STATE: tuple[StateRule, ...] = (_one_of_two, _pressure_can_be, _composition, _radiation_is_there)


def _spots_fit(file: Any) -> Iterator[Fault]:
    if file.initial.is_a(SpotsSection):
        for number, spot in enumerate(file.initial.spots):
            path = f"initial.spots.{number}"
            yield from apply_rules([partial(rule, path, spot) for rule in (_spot_place, _spot_composition)], file)


def _spot_place(path: str, spot: Any, file: Any) -> Iterator[Fault]:
    yield from _inside(join(path, "centre"), spot.centre, file)


def _spot_composition(path: str, spot: Any, file: Any) -> Iterator[Fault]:
    if spot.composition is not None:
        yield from _composition_faults(join(path, "composition"), spot.composition, species_of(file)[0])


def _inside(key: str, point: tuple[float, ...], file: Any) -> Iterator[Fault]:
    """Faults of a point that does not lie in the mesh."""
    axes = len(file.mesh.zones)
    if len(point) != axes:
        yield Fault(key, f"expected one entry for each of {axes} axes, came {len(point)}")
        return
    for name, at, length in zip(AXIS_NAMES, point, file.mesh.size, strict=False):
        if not 0.0 <= at <= length:
            yield Fault(key, f"expected {name} between 0 and {length:g} cm, came {at:g}")


def _plane(key: str, axis: str, at: float, file: Any) -> Iterator[Fault]:
    """Faults of a position along one axis."""
    size = file.mesh.size
    number = AXIS_NAMES.index(axis)
    if number >= len(size):
        yield Fault("initial.axis", f"the mesh has no axis {axis}")
    elif at > size[number]:
        yield Fault(key, f"expected at most {size[number]:g} cm, the extent along {axis}, came {at:g}")


def _riemann_fits(file: Any) -> Iterator[Fault]:
    if file.initial.is_a(RiemannSection):
        yield from _plane("initial.position", file.initial.axis, file.initial.position, file)


def _blast_fits(file: Any) -> Iterator[Fault]:
    if file.initial.is_a(BlastSection) and file.initial.centre is not None:
        yield from _inside("initial.centre", file.initial.centre, file)


def _slab_fits(file: Any) -> Iterator[Fault]:
    if file.initial.is_a(RadiationSlabSection):
        yield from _plane("initial.ends", file.initial.axis, file.initial.ends, file)


def _slab_is_thick(file: Any) -> Iterator[Fault]:
    if file.initial.is_a(RadiationSlabSection) and not file.initial.begins < file.initial.ends:
        more = f"expected more than begins = {file.initial.begins:g}"
        yield Fault("initial.ends", f"{more}, came {file.initial.ends:g}")


def _slab_has_radiation(file: Any) -> Iterator[Fault]:
    if file.initial.is_a(RadiationSlabSection) and file.transport is None:
        yield Fault("initial.kind", "a radiation_slab needs [transport]")


STATE_RULES: tuple[Rule, ...] = (
    _initial_state,
    _left_state,
    _right_state,
    *(partial(_fixed_edge, axis, side) for axis, side in edges(3)),
    *(partial(_fixed_state, axis, side) for axis, side in edges(3)),
    _spots_fit,
    _riemann_fits,
    _blast_fits,
    _slab_fits,
    _slab_is_thick,
    _slab_has_radiation,
)
