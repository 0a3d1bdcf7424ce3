"""A second implementation of the toys' semantics: the whole mesh at once, with ``numpy.pad``.

It knows declarations and kernels, and nothing of tiles, stages, phases or tasks, so that it can be trusted
to disagree when those are wrong.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Edge, Mesh, Triple
from breakstep.mesh.tiling import Tile
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Reduction
from breakstep.steps.splitting import Repeat
from breakstep.steps.step import Array, Call, Read, Step

PAD_MODES = {Edge.PERIODIC: "wrap", Edge.REFLECTING: "symmetric", Edge.OUTFLOW: "edge"}


def pad_mesh(array: Array, declared: Field, mesh: Mesh, read: Read) -> Array:
    """The whole mesh with its ghost zones, shape (components, nx + 2 hx, ny + 2 hy, nz + 2 hz)."""
    padded = array
    for axis in range(mesh.dimensions):
        for side in (0, 1):
            padded = _pad_side(padded, declared, mesh.edge(axis, side), axis, side, read.halo[axis], array.shape)
    if not read.corners:
        padded[:, beyond(array.shape[1:], read.halo) > 1] = np.nan
    return padded


def _pad_side(
    padded: Array, declared: Field, kind: Edge, axis: int, side: int, width: int, own: tuple[int, ...]
) -> Array:
    """Add one side; a wrap must look at the own zones only, so the other side's ghost zones are cut off."""
    if width == 0:
        return padded.copy()
    along = axis + 1
    bare = padded if side == 0 else np.take(padded, range(width, width + own[along]), axis=along)
    amounts = [(0, 0)] * 4
    amounts[along] = (width, 0) if side == 0 else (0, width)
    if kind is Edge.FIXED:
        values = declared.fixed[(axis, side)]
        grown = np.stack([np.pad(c, amounts[1:], constant_values=v) for c, v in zip(bare, values, strict=True)])
    else:
        grown = np.pad(bare, amounts, mode=PAD_MODES[kind])  # type: ignore[call-overload]
    ghosts = np.take(grown, range(width) if side == 0 else range(-width, 0), axis=along).copy()
    if kind is Edge.REFLECTING:
        for component in declared.normal.get(axis, ()):
            ghosts[component] = -ghosts[component]
    return np.concatenate([ghosts, padded] if side == 0 else [padded, ghosts], axis=along)


def beyond(own: tuple[int, ...], widths: Triple) -> Array:
    """Along how many axes each zone of a padded array is a ghost zone."""
    ghost = [np.pad(np.zeros(n, dtype=int), w, constant_values=1) for n, w in zip(own, widths, strict=True)]
    along: Array = ghost[0][:, None, None] + ghost[1][None, :, None] + ghost[2][None, None, :]
    return along


@dataclass
class March:
    """A classical run: each step over the whole mesh, in the order of the list.

    Attributes
    ----------
    fields : dict of str to ndarray
        Final state.
    values : dict of str to list of ndarray
        Each cycle-level reduction's results, in the order they were finished.
    iterations : list of int
        How many iterations each repeat executed, in order.
    """

    problem: Problem
    fields: dict[str, Array] = field(init=False)
    values: dict[str, list[Array]] = field(init=False)
    iterations: list[int] = field(default_factory=list)

    def __post_init__(self) -> None:
        mesh = self.problem.mesh
        whole = Tile(0, (0, 0, 0), (0, 0, 0), mesh.zones)
        self.fields = dict(self.problem.initial(whole, mesh))
        self.values = {r.name: [] for r in self.problem.splitting.reductions}
        self._measure_first()
        for cycle in range(self.problem.cycles):
            self._cycle(cycle)

    def _measure_first(self) -> None:
        for reduction in self.problem.splitting.reductions:
            for _ in range(1 + reduction.lag):
                self._measure(reduction, -1)

    def _measure(self, reduction: Reduction, cycle: int) -> None:
        made = self.values[reduction.name]
        vector = reduction.kernel(self.fields, self._call(reduction.name, cycle, -1, {}))
        made.append(np.asarray(reduction.finish(vector, made[-1] if made else None)))

    def _cycle(self, cycle: int) -> None:
        splitting = self.problem.splitting
        values = {name: made[cycle] for name, made in self.values.items()}
        for item in splitting.orders[cycle % len(splitting.orders)]:
            if isinstance(item, Repeat):
                self._repeat(item, cycle, values)
            else:
                self._step(item, cycle, -1, values)
        for reduction in splitting.reductions:
            self._measure(reduction, cycle)

    def _repeat(self, repeat: Repeat, cycle: int, values: Mapping[str, Array]) -> None:
        previous, last = None, repeat.at_most
        iteration = 0
        while iteration < min(last, repeat.at_most):
            for step in repeat.body:
                self._step(step, cycle, iteration, values)
            call = self._call(repeat.until.name, cycle, iteration, {})
            previous = repeat.until.finish(repeat.until.kernel(self.fields, call), previous)
            if last == repeat.at_most and repeat.stop(previous):
                last = iteration + 1 + repeat.until.lag
            iteration += 1
        self.iterations.append(iteration)

    def _step(self, step: Step, cycle: int, iteration: int, values: Mapping[str, Array]) -> None:
        given = {}
        for read in step.reads:
            array = self.fields[read.field]
            declared = self.problem.by_name()[read.field]
            given[read.field] = array if read.is_local else pad_mesh(array, declared, self.problem.mesh, read)
        used = {name: values[name] for name in step.uses}
        self.fields.update(step.kernel(given, self._call(step.name, cycle, iteration, used, step.fraction)))

    def _call(self, name: str, cycle: int, iteration: int, values: Mapping[str, Array], fraction: float = 1.0) -> Call:
        mesh = self.problem.mesh
        place = (0, (0, 0, 0), mesh.zones, mesh.widths, mesh.active)
        return Call(name, cycle, iteration, *place, values, fraction)
