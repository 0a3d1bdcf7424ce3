"""What every worker of a run knows: the problem, its tiling, its stages and its halo plans."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from breakstep.errors import KernelError
from breakstep.graph.stages import Template, build_template
from breakstep.graph.tasks import HaloPlans
from breakstep.mesh.fields import Field
from breakstep.mesh.halo import Rim
from breakstep.mesh.mesh import Triple
from breakstep.mesh.tiling import Tiling
from breakstep.steps.calling import ask_user, call_user
from breakstep.steps.modules import Source
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Reduction, finish_rows
from breakstep.steps.splitting import Repeat
from breakstep.steps.step import Array, Read


@dataclass
class Program:
    """A problem cut into tiles and stages; pickles small and rebuilds its plans on arrival.

    Parameters
    ----------
    problem : Problem
    tile_shape : tuple of int
        Zones of a tile along each axis of the mesh.
    fuse : bool
        Whether steps with no halo between them share a task.
    """

    problem: Problem
    tile_shape: tuple[int, ...]
    fuse: bool = True
    tiling: Tiling = field(init=False, repr=False)
    template: Template = field(init=False, repr=False)
    plans: HaloPlans = field(init=False, repr=False)
    fields: dict[str, Field] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        self.tiling = self.problem.cut(self.tile_shape)
        self.template = build_template(self.problem.splitting, fuse=self.fuse)
        self.plans = HaloPlans(self.tiling)
        self.fields = self.problem.by_name()
        repeats = (item for item in self.problem.splitting.items() if isinstance(item, Repeat))
        self._reductions = {reduction.name: reduction for reduction in self.problem.splitting.all_reductions()}
        self._rims: dict[tuple[int, Read, Triple], Rim] = {}
        self._stops = {repeat.name: repeat.stop for repeat in repeats}

    def __reduce__(self) -> tuple[Any, tuple[Any, ...]]:
        # The sources come first: what follows can be unpickled only where their modules are loaded.
        return _unpickled, (self.problem.sources, self.problem, self.tile_shape, self.fuse)

    @property
    def state_fields(self) -> tuple[str, ...]:
        """Fields that make up the state: all but scratch that no cycle reads before it is made anew."""
        carried = self.template.carried
        return tuple(n for n, f in self.fields.items() if not f.scratch or (n in carried and not f.per_tile))

    def scratch_values(self, tile: int) -> dict[str, Array]:
        """What scratch fields with one value a tile begin with."""
        shape = self.tiling.tiles[tile].shape
        return {n: np.zeros(f.shape(shape)) for n, f in self.fields.items() if f.per_tile}

    def initial(self, tile: int) -> dict[str, Array]:
        """The initial state of one tile, checked; scratch values of a whole tile begin at 0.

        Raises
        ------
        KernelError
            The initial state is incomplete, misshapen or not finite.
        """
        from breakstep.engine.execute import check_arrays

        place = self.tiling.tiles[tile]
        where = f"the initial state of tile {tile}"
        made = call_user(self.problem.initial, place, self.problem.mesh, where=where)
        if not isinstance(made, Mapping):
            raise KernelError(f"{where}: expected a mapping of field to array, got {type(made).__name__}")
        zeros = self.scratch_values(tile)
        arrays = {**zeros, **made}
        expected = {*self.state_fields, *zeros, *self.template.needed, *(arrays.keys() & self.fields.keys())}
        return check_arrays(arrays, sorted(expected), self.fields, place, where)

    def stop(self, stage: int, verdict: Array) -> bool:
        """Whether a verdict ends the repeat that a stage belongs to."""
        repeat = self.template.stages[stage].repeat
        return ask_user(self._stops[repeat], verdict, where=f"stop of repeat {repeat}")

    def finish(
        self, stage: int, reduction: Reduction, combined: Array | None, previous: Array | None, rows: int
    ) -> Array:
        """The result of a reduction measured at the end of a stage, shape (rows, n).

        A verdict that says stop stands: the iterations that a lag still lets run may measure a larger
        residual again, and must not start the repeat anew.
        """
        if self.template.stages[stage].repeat and previous is not None and self.stop(stage, previous):
            combined = None
        return finish_rows(reduction, combined, previous, rows)

    def rim(self, tile: int, read: Read, offset: Triple) -> Rim:
        """The rim of one offset that a tile needs for a read."""
        key = (tile, read, offset)
        if key not in self._rims:
            self._rims.update({(tile, read, rim.offset): rim for rim in self.plans.plan(tile, read).rims})
        return self._rims[key]

    def reduction(self, name: str) -> Reduction:
        """A reduction by name."""
        return self._reductions[name]


def _unpickled(sources: tuple[Source, ...], problem: Problem, tile_shape: tuple[int, ...], fuse: bool) -> Program:
    del sources
    return Program(problem, tile_shape, fuse)
