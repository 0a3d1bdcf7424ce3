"""Rules that tie the keys of a scenario together: what each table alone cannot tell.

Each rule looks at the sound part of a file and yields faults; what it asks for and does not find sound
makes it silent (``reading``). The checks of meshes, tilings and steps themselves are asked, not repeated.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from breakstep.errors import BreakstepError
from breakstep.kernels.hydro.rows import HALO
from breakstep.mesh.mesh import AXIS_NAMES
from breakstep.mesh.tiling import Tiling
from breakstep.scenario.build import build_mesh
from breakstep.scenario.faults import Fault
from breakstep.scenario.reading import Rule, apply_rules
from breakstep.scenario.rehearsed import TIMER_RULES
from breakstep.scenario.state_rules import STATE_RULES
from breakstep.steps.timestep import LAGGED_CFL_LIMIT

LAGGED_GROWTH_LIMIT = 1.5
"""Largest growth of dt from cycle to cycle with a lag: dt must not leap, within the lag, to what only an
outdated state allowed. Three halves a cycle still lets dt recover tenfold in six cycles."""
MOST_ZONES = 10**9
MOST_TILES = 10**6
"""Beyond these a Python process could not hold the list of tasks of one cycle."""


def _axes_agree(file: Any) -> Iterator[Fault]:
    axes = len(file.mesh.zones)
    for name, what in (("size", file.mesh.size), ("tile", file.mesh.tile)):
        if len(what) != axes:
            yield Fault(f"mesh.{name}", f"expected one entry for each of {axes} axes, came {len(what)}")


def _tile_fits(file: Any) -> Iterator[Fault]:
    for name, zones, extent in zip(AXIS_NAMES, file.mesh.zones, file.mesh.tile, strict=False):
        if extent > zones:
            yield Fault("mesh.tile", f"a tile {extent} zones long does not fit {zones} zones along {name}")


def _not_too_many(file: Any) -> Iterator[Fault]:
    zones = int(np.prod(file.mesh.zones, dtype=object))
    if zones > MOST_ZONES:
        yield Fault("mesh.zones", f"expected at most {MOST_ZONES:.0e} zones in all, came {zones:.1e}")
    tiles = int(np.prod([-(-n // t) for n, t in _zones_and_tile(file)], dtype=object))
    if tiles > MOST_TILES:
        yield Fault("mesh.tile", f"expected at most {MOST_TILES:.0e} tiles, came {tiles:.1e}; make tiles larger")


def _zones_and_tile(file: Any) -> Iterator[tuple[int, int]]:
    return zip(file.mesh.zones, file.mesh.tile, strict=False)


def _edges_of_axes(file: Any) -> Iterator[Fault]:
    for axis, name in enumerate(AXIS_NAMES):
        pair = getattr(file.mesh.edges, name)
        if axis >= len(file.mesh.zones) and pair != ("periodic", "periodic"):
            yield Fault(f"mesh.edges.{name}", f"the mesh has no axis {name}; leave this key out")
        elif len(set(pair)) > 1 and "periodic" in pair:
            yield Fault(f"mesh.edges.{name}", "both edges of an axis are periodic or neither is")


def _halos_fit(file: Any) -> Iterator[Fault]:
    widths = {"hydro": HALO, "transport": 1}
    needed = [(step, width) for step, width in widths.items() if getattr(file, step) is not None]
    if any(_axes_agree(file)) or any(_tile_fits(file)) or any(_edges_of_axes(file)) or any(_not_too_many(file)):
        return  # said already, and no tiling can be made
    tiling = Tiling(build_mesh(file.mesh), file.mesh.tile)
    for step, width in needed:
        halo = [width if active else 0 for active in tiling.mesh.active]
        try:
            tiling.require_halo((halo[0], halo[1], halo[2]), f"[{step}]")
        except BreakstepError as error:
            yield Fault("mesh.tile", error.message)


def _something_happens(file: Any) -> Iterator[Fault]:
    if file.hydro is None and file.transport is None and file.burning is None and file.timers is None:
        yield Fault("", "no step takes part; add one of the tables [hydro], [transport], [burning], [timers]")


def _lagged_cfl(file: Any) -> Iterator[Fault]:
    lag, cfl = file.time_step.lag, file.time_step.cfl
    if lag > 0 and cfl > LAGGED_CFL_LIMIT:
        yield Fault(
            "time_step.cfl",
            f"expected at most {LAGGED_CFL_LIMIT} with a lag of {lag}, came {cfl}: the state moves on before"
            " dt is used; lower cfl or set lag = 0",
        )


def _lagged_growth(file: Any) -> Iterator[Fault]:
    lag, growth = file.time_step.lag, file.time_step.growth
    if lag > 0 and growth > LAGGED_GROWTH_LIMIT:
        yield Fault(
            "time_step.growth",
            f"expected at most {LAGGED_GROWTH_LIMIT} with a lag of {lag}, came {growth}: the state moves on"
            " before dt is used; lower growth or set lag = 0",
        )


def _time_step_is_bounded(file: Any) -> Iterator[Fault]:
    if file.hydro is None and file.time_step.maximum is None:
        yield Fault("time_step.maximum", "is missing; without [hydro] nothing else bounds the time step")


def _transport_group_range(file: Any) -> Iterator[Fault]:
    table = file.transport
    if table is not None and not table.lowest_photon_energy < table.highest_photon_energy:
        yield Fault(
            "transport.highest_photon_energy",
            f"expected more than lowest_photon_energy = {table.lowest_photon_energy}, came"
            f" {table.highest_photon_energy}",
        )


def _transport_iterations(file: Any) -> Iterator[Fault]:
    if file.transport is not None and file.transport.at_most < 1 + file.transport.lag:
        yield Fault(
            "transport.at_most",
            f"expected at least {1 + file.transport.lag}, so that a verdict {file.transport.lag} iterations"
            f" late is seen, came {file.transport.at_most}",
        )


def _transport_opacity(file: Any) -> Iterator[Fault]:
    if file.transport is not None and not file.transport.opacity.absorption + file.transport.opacity.scattering > 0:
        yield Fault("transport.opacity", "absorption and scattering cannot both be 0; diffusion would be unbounded")


def _radiation_counted_once(file: Any) -> Iterator[Fault]:
    if file.transport is not None and file.eos.kind == "stellar" and file.eos.radiation:
        yield Fault(
            "eos.radiation",
            "expected false, came true: [transport] carries the radiation, which would count twice",
        )


def _species_once(file: Any) -> Iterator[Fault]:
    if file.burning is not None and file.species is not None:
        yield Fault("species", "with [burning] the species are the network's; leave this table out")


def _species_lists(file: Any) -> Iterator[Fault]:
    if file.species is None:
        return
    names = file.species.names
    if bool(names) == (file.species.network is not None):
        yield Fault("species.names", "expected names of species or a network's name, one of the two")
    for name in sorted({name for name in names if names.count(name) > 1}):
        yield Fault("species.names", f"{name} is listed twice")
    for key, values in (("mass_numbers", file.species.mass_numbers), ("charges", file.species.charges)):
        if len(values) != len(names):
            yield Fault(f"species.{key}", f"expected one entry for each of {len(names)} names, came {len(values)}")


RULES: tuple[Rule, ...] = (
    _axes_agree,
    _tile_fits,
    _not_too_many,
    _edges_of_axes,
    _halos_fit,
    _something_happens,
    _lagged_cfl,
    _lagged_growth,
    _time_step_is_bounded,
    _transport_group_range,
    _transport_iterations,
    _transport_opacity,
    _radiation_counted_once,
    _species_once,
    _species_lists,
    *STATE_RULES,
    *TIMER_RULES,
)


def find_faults(file: Any) -> list[Fault]:
    """Faults of a file by all rules.

    Parameters
    ----------
    file : SoundPart of ScenarioFile
    """
    return apply_rules(RULES, file)
