"""A small mesh of tiles in plain numpy that drives the transport kernels in tests.

Edge and corner zones of every halo are NaN and every array given to a kernel is write-protected, so that
reading what was not declared, or changing an input, shows.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.transport import solve as transport

Floats = NDArray[np.float64]
Box = tuple[slice, slice, slice]


def protected(array: Floats) -> Floats:
    copy = np.ascontiguousarray(array).copy()
    copy.flags.writeable = False
    return copy


@dataclass
class Mesh:
    """Zones, their boundary, and the places where the mesh is cut into tiles."""

    shape: tuple[int, int, int]
    axes: tuple[int, ...]
    spacing: tuple[float, float, float] = (1.0, 1.0, 1.0)
    boundary: str = "reflecting"
    cuts: tuple[tuple[int, ...], ...] = ((), (), ())

    def tiles(self) -> list[Box]:
        spans = []
        for n, cuts in zip(self.shape, self.cuts, strict=True):
            ends = [0, *cuts, n]
            spans.append([slice(a, b) for a, b in itertools.pairwise(ends)])
        return list(itertools.product(*spans))

    def padded(self, field: Floats) -> Floats:
        mode = {"reflecting": "edge", "periodic": "wrap", "zero": "constant"}[self.boundary]
        return np.pad(field, [(0, 0), *((1, 1) if a in self.axes else (0, 0) for a in range(3))], mode=mode)

    def with_halo(self, padded: Floats, box: Box) -> Floats:
        """Cut a tile with its halo out of a padded field."""
        wide = tuple(slice(s.start, s.stop + 2) if a in self.axes else s for a, s in enumerate(box))
        tile = padded[(slice(None), *wide)].copy()
        outside = sum(
            np.isin(index, (0, tile.shape[1 + a] - 1)).astype(int)
            for a, index in enumerate(np.indices(tile.shape[1:]))
            if a in self.axes
        )
        tile[:, np.asarray(outside) > 1] = np.nan
        return protected(tile)

    def halos(self, field: Floats) -> list[Floats]:
        padded = self.padded(field)
        return [self.with_halo(padded, box) for box in self.tiles()]

    def cut(self, field: Floats) -> list[Floats]:
        return [protected(field[(slice(None), *box)]) for box in self.tiles()]

    def join(self, parts: list[Floats]) -> Floats:
        whole = np.empty((parts[0].shape[0], *self.shape))
        for box, part in zip(self.tiles(), parts, strict=True):
            whole[(slice(None), *box)] = part
        return whole


def assemble(
    mesh: Mesh, radiation: Floats, material: transport.Material, redistribution: Floats, **options: object
) -> list[transport.Assembly]:
    """Assemble every tile from whole-mesh fields (``material.total`` without halo as well)."""
    pieces = zip(mesh.halos(material.total), *(mesh.cut(field) for field in material[1:]), strict=True)
    return [
        transport.assemble(
            halo,
            transport.Material(*piece),
            redistribution,
            spacing=mesh.spacing,
            axes=mesh.axes,
            **options,  # type: ignore[arg-type]
        )
        for halo, piece in zip(mesh.halos(radiation), pieces, strict=True)
    ]


@dataclass
class Solution:
    radiation: Floats
    calls: int
    history: list[float]


def solve(
    mesh: Mesh,
    radiation: Floats,
    assemblies: list[transport.Assembly],
    *,
    passes: int = 2,
    omega: float = 1.0,
    tolerance: float = 1e-13,
    max_calls: int = 5000,
) -> Solution:
    """Relax all tiles until two successive calls both ask for small corrections."""
    systems = [protected(a.system) for a in assemblies]
    history: list[float] = []
    for call in range(max_calls):
        parts, norms = [], []
        for box, halo, system in zip(mesh.tiles(), mesh.halos(radiation), systems, strict=True):
            part, norm = transport.relax(
                halo,
                system,
                axes=mesh.axes,
                first_colour=call * passes % 2,
                passes=passes,
                origin_parity=sum(s.start for s in box) % 2,
                omega=omega,
            )
            parts.append(part)
            norms.append(norm)
        radiation = mesh.join(parts)
        correction, scale = np.max(norms, axis=0)
        history.append(float(correction / scale) if scale > 0.0 else 0.0)
        if len(history) > 1 and history[-1] <= tolerance and history[-2] <= tolerance:
            break
    return Solution(radiation, len(history), history)


def gain(mesh: Mesh, new: Floats, old: Floats, assemblies: list[transport.Assembly], deposit: Floats) -> Floats:
    """The matter's gain over the whole mesh."""
    pieces = zip(mesh.halos(new), mesh.cut(old), assemblies, mesh.cut(deposit), strict=True)
    return mesh.join(
        [transport.energy_gain(n, o, protected(a.bands), axes=mesh.axes, deposit=d) for n, o, a, d in pieces]
    )


def linear_steps(
    mesh: Mesh,
    radiation: Floats,
    theta: Floats,
    times: Floats,
    material: Callable[[Floats, Floats, float, float], transport.Material],
    *,
    omega: float,
    tolerance: float,
) -> tuple[Floats, Floats]:
    """March a problem with beta = 1 (theta is the material energy), c = 1, without limiter.

    ``material(radiation, theta, start, dt)`` gives the fields of a step.
    """
    for start, stop in itertools.pairwise(times):
        fields = material(radiation, theta, start, stop - start)
        groups = radiation.shape[0]
        assemblies = assemble(
            mesh, radiation, fields, np.zeros((groups, groups)), light_path=stop - start, limited=False
        )
        new = solve(mesh, radiation, assemblies, passes=20, omega=omega, tolerance=tolerance).radiation
        theta = theta + gain(mesh, new, radiation, assemblies, fields.deposit)
        radiation = new
    return radiation, theta
