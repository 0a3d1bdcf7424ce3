"""Samples: what a step is given at some tiles of a state that has evolved, with more around it than it declares.

The splitting is walked in the plainest way, step after step over all tiles, verdicts and time steps without
lag, so that nothing here depends on the graph or a dispatch. A step that fails is noted and leaves its fields
as they were, so that the steps behind it still get something to work on.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field

import numpy as np

from breakstep.audit.calls import Outcome, Part, call_watched, name_writes
from breakstep.audit.memory import Watch, usual_arithmetic
from breakstep.audit.reach import SHARED, Reached, reached_state
from breakstep.engine.program import Program
from breakstep.mesh.halo import assemble, cut, plan_halo
from breakstep.mesh.mesh import Triple
from breakstep.steps.calling import ask_user
from breakstep.steps.reduction import Reduction, combine, finish_rows
from breakstep.steps.splitting import Repeat
from breakstep.steps.step import Array, Call, Read, Step

EXTRA = 2  # ghost zones beyond the declared ones that a sample keeps, where the tiling has them
WIDE = 1 << 15  # bytes around what kernels allocate during the walk; more makes the C library map pages for each
MOST = 6  # samples of one step; more than that seldom showed anything new


@dataclass
class Sample:
    """One call of one step, and what it yielded.

    Attributes
    ----------
    call : Call
        With the results of all reductions known by then, declared or not.
    fields : dict of str to ndarray
        The tile's own zones of every field that exists by then.
    padded : dict of str to ndarray
        Each declared zone field with ``reach`` ghost zones, corners filled.
    reach : dict of str to tuple of int
    cut_axes : tuple of bool
        Along which axes the mesh has more than one tile.
    digest : str
        Of the outputs in the process that took the sample, or "" where it failed.
    repeat : str
        Name of the repeat it stands in.
    """

    part: str
    call: Call
    fields: dict[str, Array]
    padded: dict[str, Array]
    reach: dict[str, Triple]
    cut_axes: tuple[bool, bool, bool]
    repeat: str = ""
    digest: str = ""

    def where(self) -> str:
        """The sample in words."""
        iteration = f", iteration {self.call.iteration}" if self.call.iteration >= 0 else ""
        return f"tile {self.call.tile}, cycle {self.call.cycle}{iteration}"


@dataclass
class Walk:
    """The samples of a program.

    Parameters
    ----------
    program : Program
    cycles : int
        How many to walk through.
    skip : frozenset of str
        Parts that must not run: they ended an earlier walk.
    entering : callable
        Told the name of each part before it runs, so that a walk that dies says where.
    """

    program: Program
    cycles: int
    skip: frozenset[str] = frozenset()
    entering: Callable[[str], None] = lambda part: None
    samples: dict[str, list[Sample]] = field(default_factory=dict)
    moved: dict[str, set[str]] = field(default_factory=dict)  # part -> what changed between its calls
    failures: dict[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.tiles = self.program.tiling.tiles
        self.state: dict[str, list[Array]] = {}
        self.values: dict[str, Array] = {}
        self._seen: dict[str, Reached] = {}
        self._watch = Watch(WIDE)  # what writes past its arrays then spoils nothing, and the walk goes on

    def run(self) -> None:
        """Walk, and keep samples."""
        program, splitting = self.program, self.program.problem.splitting
        for tile in range(len(self.tiles)):
            for name, array in program.initial(tile).items():
                self.state.setdefault(name, []).append(array)
        for cycle in range(self.cycles):
            for reduction in splitting.reductions:
                self._reduce(reduction, cycle, -1, "")
            if program.problem.ended is not None and splitting.reductions:
                first = self.values.get(splitting.reductions[0].name)
                if first is None or ask_user(program.problem.ended, first, where=f"ended before cycle {cycle}"):
                    break
            for item in splitting.orders[cycle % len(splitting.orders)]:
                self._item(item, cycle)

    def _item(self, item: Step | Repeat, cycle: int) -> None:
        if isinstance(item, Step):
            self._step(item, cycle, -1, "")
            return
        self.values.pop(item.until.name, None)
        for iteration in range(item.at_most):
            for step in item.body:
                self._step(step, cycle, iteration, item.name)
            self._reduce(item.until, cycle, iteration, item.name)
            verdict = self.values.get(item.until.name)
            if verdict is None or ask_user(item.stop, verdict, where=f"stop of repeat {item.name}"):
                return

    def _step(self, step: Step, cycle: int, iteration: int, repeat: str) -> None:
        made: list[Mapping[str, Array]] = []
        for tile, outcome in self._calls(step, cycle, iteration, repeat):
            if outcome.arrays is None or name_writes(outcome, step, self.program.fields, self.tiles[tile].shape):
                self.failures.setdefault(step.name, outcome.error)
                continue
            made.append({name: np.ascontiguousarray(outcome.arrays[name]).copy() for name in step.writes})
        for name in step.writes if len(made) == len(self.tiles) else ():
            self.state[name] = [arrays[name] for arrays in made]

    def _reduce(self, reduction: Reduction, cycle: int, iteration: int, repeat: str) -> None:
        vectors: list[Array | None] = []
        for _, outcome in self._calls(reduction, cycle, iteration, repeat):
            if outcome.arrays is None:
                self.failures.setdefault(reduction.name, outcome.error)
                continue
            vectors.append(outcome.arrays[""].copy())
        if len(vectors) == len(self.tiles):
            combined = combine(reduction.combine, vectors)
            self.values[reduction.name] = finish_rows(reduction, combined, self.values.get(reduction.name), 1)[-1]

    def _calls(self, part: Part, cycle: int, iteration: int, repeat: str) -> Iterator[tuple[int, Outcome]]:
        """Call a part at every tile, the sampled ones first kept."""
        if any(read.field not in self.state for read in part.reads):
            return
        if part.name in self.skip:  # keep what it would be given
            for tile in self._wanted(part, cycle, iteration):
                call = self._call(part, tile, cycle, iteration)
                self.samples.setdefault(part.name, []).append(self._sample(part, tile, call, repeat))
            return
        self.entering(part.name)
        wanted = self._wanted(part, cycle, iteration)
        before = reached_state(part.kernel)
        if part.name in self._seen:
            changed = self._seen[part.name].differing(before)
            self.moved.setdefault(part.name, set()).update(changed - SHARED.keys())
        for tile in range(len(self.tiles)):
            call = self._call(part, tile, cycle, iteration)
            # Copies: what a kernel does to its inputs must not reach the others' samples.
            given = {read.field: _protected(self._padded(tile, read)) for read in part.reads}
            others = _Copies({name: arrays[tile] for name, arrays in self.state.items()})
            kept = self._sample(part, tile, call, repeat) if tile in wanted else None
            outcome = call_watched(self._watch, part, given, call, others, self.values)
            usual_arithmetic()
            if kept is not None:
                kept.digest = digest(outcome)
                self.samples.setdefault(part.name, []).append(kept)
            yield tile, outcome
        self._seen[part.name] = reached_state(part.kernel)

    def _call(self, part: Part, tile: int, cycle: int, iteration: int) -> Call:
        place, mesh = self.tiles[tile], self.program.problem.mesh
        fraction = part.fraction if isinstance(part, Step) else 1.0
        return Call(
            part.name, cycle, iteration, tile, place.origin, place.shape, mesh.widths, mesh.active, {}, fraction
        )  # fmt: skip

    def _padded(self, tile: int, read: Read) -> Array:
        own = self.state[read.field][tile]
        if read.is_local:
            return own
        plan = plan_halo(self.program.tiling, tile, read.halo, read.corners)
        rims = {rim.offset: cut(rim, self.state[read.field][rim.neighbour]) for rim in plan.rims}
        return assemble(plan, self.program.fields[read.field], own, rims)

    def _sample(self, part: Part, tile: int, call: Call, repeat: str) -> Sample:
        padded, reach = {}, {}
        for read in part.reads:
            reach[read.field] = self._reach(read)
            padded[read.field] = self._padded(tile, Read(read.field, reach[read.field], corners=True)).copy()
        call.values = {name: value.copy() for name, value in self.values.items()}
        fields = {name: arrays[tile].copy() for name, arrays in self.state.items()}
        grid = self.program.tiling.grid
        cut_axes = (grid[0] > 1, grid[1] > 1, grid[2] > 1)
        return Sample(part.name, call, fields, padded, reach, cut_axes, repeat)

    def _reach(self, read: Read) -> Triple:
        """Declared ghost zones and a few more, as far as tiles and fixed edges allow."""
        tiling, kind = self.program.tiling, self.program.fields[read.field]
        if kind.per_tile:
            return (0, 0, 0)
        wide = []
        for axis, width in enumerate(read.halo):
            most = min(width + EXTRA, tiling.narrowest(axis)) if tiling.mesh.active[axis] else width
            known = width > 0 or self._has_edges(read.field, axis)
            wide.append(most if known else width)
        return (wide[0], wide[1], wide[2])

    def _has_edges(self, name: str, axis: int) -> bool:
        """Whether ghost zones beyond the mesh can be filled along an axis."""
        mesh, fixed = self.program.problem.mesh, self.program.fields[name].fixed
        if not mesh.active[axis]:
            return False
        return all(mesh.edge(axis, side) != "fixed" or (axis, side) in fixed for side in (0, 1))

    def _wanted(self, part: Part, cycle: int, iteration: int) -> set[int]:
        """Tiles to keep: in the first cycle and the last, the one that varies most, the calmest, and the middle."""
        have = sum(1 for sample in self.samples.get(part.name, ()) if sample.call.cycle == cycle)
        first = cycle == 0 and iteration <= 0
        last = cycle == self.cycles - 1 and iteration in (-1, 1)
        if not (first or last) or have >= MOST // 2:
            return set()
        count = len(self.tiles)
        variety = [sum(_variety(self.state[read.field][tile]) for read in part.reads) for tile in range(count)]
        liked = [int(np.argmax(variety)), count // 2 + count % 2, int(np.argmin(variety)), 0, count - 1]
        return set(list(dict.fromkeys(tile % count for tile in liked))[: MOST // 2 - have])


def private_fields(program: Program) -> frozenset[str]:
    """Scratch fields that no step reads beyond its tile: in what order they hold their numbers is the steps' affair."""
    shared = {read.field for _, read in program.problem.splitting.halo_reads()}
    return frozenset(name for name, kind in program.fields.items() if kind.scratch and name not in shared)


class _Copies(dict[str, Array]):
    """Arrays that are handed out as protected copies."""

    def __getitem__(self, name: str) -> Array:
        return _protected(super().__getitem__(name))


def _protected(array: Array) -> Array:
    copy = array.copy()
    copy.flags.writeable = False
    return copy


def _variety(array: Array) -> float:
    """How much the components of a tile vary, each relative to its size."""
    flat = array.reshape(array.shape[0], -1)
    size = np.abs(flat).max(axis=1)
    return float(np.sum((flat.max(axis=1) - flat.min(axis=1))[size > 0] / size[size > 0]))


def digest(outcome: Outcome) -> str:
    """A short name for the bits of an outcome; "" if there are none."""
    if outcome.arrays is None:
        return ""
    hashed = hashlib.sha256()
    for name in sorted(outcome.arrays):
        array = np.ascontiguousarray(outcome.arrays[name])
        hashed.update(f"{name} {array.dtype} {array.shape}".encode())
        hashed.update(array.tobytes())
    return hashed.hexdigest()
