"""What a false declaration costs: edges and ghost zones with the declaration as it is and as it should be.

Counts on the graph of one cycle, each repeat taken once; with a recorded run also the waits that would go.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any, TypeAlias

import numpy as np

from breakstep.audit.findings import Finding
from breakstep.engine.program import Program
from breakstep.errors import BreakstepError
from breakstep.graph.stages import RepeatStages, Template
from breakstep.graph.tasks import Kind, TaskGraph
from breakstep.graph.unroll import Phase
from breakstep.mesh.mesh import Triple
from breakstep.profile.run import Profile
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import Item, Repeat
from breakstep.steps.step import Read, Step


@dataclass(frozen=True)
class Edges:
    """The edges of one cycle.

    Attributes
    ----------
    between : frozenset of (str, int, str, int)
        Consumer's step and tile, producer's step and tile, of every edge between two tiles. Steps, not stages:
        another declaration may fuse other steps.
    data, values : int
        All edges that carry arrays; those that carry results of reductions.
    ghost_bytes : int
        Ghost zones that tiles read from each other.
    """

    between: frozenset[tuple[str, int, str, int]]
    data: int
    values: int
    ghost_bytes: int


def cycle_phases(template: Template) -> Iterator[tuple[bool, Phase]]:
    """The phases of two rounds through the orders, and whether each belongs to the second, settled one."""
    latest: dict[str, int] = {}
    number = 1
    for settled in (False, True):
        for cycle, order in enumerate(template.orders):
            for node in order:
                for stage in node.stages if isinstance(node, RepeatStages) else (node,):
                    sources = {read.field: latest.get(read.field, 0) for read in stage.reads}
                    yield settled, Phase(number, stage, cycle, sources=sources)
                    latest.update(dict.fromkeys(stage.writes, number))
                    number += 1


def edges_of(program: Program) -> Edges:
    """Count the edges of one settled round, divided by the cycles in it."""
    graph = TaskGraph(program.tiling, [0] * len(program.tiling))
    orders = len(program.template.orders)
    phases: dict[int, Phase] = {}
    between: set[tuple[str, int, str, int]] = set()
    data = values = ghost = 0
    for settled, phase in cycle_phases(program.template):
        phases[phase.number] = phase
        for task in graph.expand(phase, barrier_after=False):
            if task.kind is not Kind.STEP or not settled:
                continue
            data += len({*task.own.values(), *(rim.producer for rim in task.rims)})
            values += len(phase.stage.uses)
            for rim in task.rims:
                ghost += rim.rim.zones * program.fields[rim.field].size * 8
                writer = _writer(phases.get(phase.sources[rim.field]), rim.field)
                between.add((_reader(phase, rim.field), task.tile, writer, rim.rim.neighbour))
    return Edges(frozenset(between), data // orders, values // orders, ghost // orders)


def _reader(phase: Phase, name: str) -> str:
    """The step of a phase that reads a field beyond its tile."""
    halos = ((step.name, read) for step in phase.stage.steps for read in step.reads)
    return next(step for step, read in halos if read.field == name and not read.is_local)


def _writer(phase: Phase | None, name: str) -> str:
    """The step of a phase that leaves a field behind."""
    steps = phase.stage.steps if phase is not None else ()
    return next((step.name for step in reversed(steps) if name in step.writes), "initial")


def with_cost(program: Program, finding: Finding, profile: Profile | None = None) -> Finding:
    """The finding with what it costs in words, if it is about a declaration."""
    if not finding.change:
        return finding
    try:
        other = redeclared(program, finding)
        if other is None:
            return finding
        before, after = edges_of(program), edges_of(other)
    except BreakstepError as error:
        return replace(finding, cost=f"The true declaration does not fit this tiling: {error}.")
    words = _difference(before, after)
    if profile is not None and before.between - after.between:
        words += _waits(profile, before.between - after.between, after.between)
    return replace(finding, cost=words)


def _difference(before: Edges, after: Edges) -> str:
    parts = []
    for what, one, two in (
        ("edges between tasks", before.data, after.data),
        ("edges from reductions", before.values, after.values),
    ):
        if one != two:
            parts.append(f"{abs(two - one)} {'more' if two > one else 'fewer'} {what} (now {one})")
    if before.ghost_bytes != after.ghost_bytes:
        change = after.ghost_bytes - before.ghost_bytes
        parts.append(
            f"{_size(abs(change))} {'more' if change > 0 else 'less'} of ghost zones (now {_size(before.ghost_bytes)})"
        )
    if not parts:
        return "Declared truly, a cycle has the same edges and ghost zones."
    return f"Declared truly, a cycle has {', '.join(parts)}."


def _size(count: int) -> str:
    for unit, scale in (("GB", 1e9), ("MB", 1e6), ("kB", 1e3)):
        if count >= scale:
            return f"{count / scale:.3g} {unit}"
    return f"{count} B"


def redeclared(program: Program, finding: Finding) -> Program | None:
    """The program with one declaration as the finding says it should be; None where nothing changes."""
    problem = program.problem
    changed = False

    def of(step: Step) -> Step:
        nonlocal changed
        if step.name != finding.part:
            return step
        new = _step_with(step, finding.field, finding.change)
        changed = changed or new != step
        return new

    def item_of(item: Item) -> Item:
        return replace(item, body=tuple(of(step) for step in item.body)) if isinstance(item, Repeat) else of(item)

    orders = tuple(tuple(item_of(item) for item in order) for order in problem.splitting.orders)
    if not changed:
        return None
    splitting = replace(problem.splitting, orders=orders)
    other: Problem = replace(problem, splitting=splitting)
    return Program(other, program.tile_shape, program.fuse)


def _step_with(step: Step, name: str, change: dict[str, Any]) -> Step:
    if "uses" in change:
        others = tuple(used for used in step.uses if used != name)
        return replace(step, uses=(*others, name) if change["uses"] else others)
    kept = tuple(read for read in step.reads if read.field != name)
    if change.get("drop"):
        return replace(step, reads=kept)
    halo: Triple = (int(change["halo"][0]), int(change["halo"][1]), int(change["halo"][2]))
    new = Read(name, halo, bool(change.get("corners")))
    if any(read.field == name for read in step.reads):
        return replace(step, reads=tuple(new if read.field == name else read for read in step.reads))
    return replace(step, reads=(*step.reads, new))


Between: TypeAlias = frozenset[tuple[str, int, str, int]]


def _waits(profile: Profile, gone: Between, kept: Between) -> str:
    """How much of the recorded waiting for neighbours hangs on edges that would go, at most."""
    nanoseconds, total = waits_on(profile, gone, kept)
    return (
        f" Of {total * 1e-9:.3g} core-seconds that the recorded run waited for neighbours, at most"
        f" {nanoseconds * 1e-9:.3g} hang on those edges."
    )


def waits_on(profile: Profile, gone: Between, kept: Between = frozenset()) -> tuple[int, int]:
    """Waits for neighbours [ns] that end when an edge of ``gone`` is satisfied, and all of them.

    A wait counts from the moment the last of the task's other inputs was there: what an edge adds, no more.

    Parameters
    ----------
    gone, kept : frozenset
        Edges as in :class:`Edges`; two tasks that an edge of ``kept`` joins as well stay joined.
    """
    recorded = _Recorded(profile, gone, kept)
    waited = profile.ledger.gaps[profile.ledger.gaps["neighbour"] > 0]
    edges = profile.edges[profile.edges["kind"].astype(str) != "barrier"]
    wanted = edges[edges["consumer"].isin(set(waited["task"]))]
    producers: dict[int, list[int]] = {}
    for producer, consumer in zip(wanted["producer"], wanted["consumer"], strict=True):
        producers.setdefault(int(consumer), []).append(int(producer))
    found = sum(
        recorded.added(int(task), producers.get(int(task), []), int(nanoseconds))
        for task, nanoseconds in zip(waited["task"], waited["neighbour"], strict=True)
    )
    return found, int(np.asarray(waited["neighbour"], np.int64).sum())


class _Recorded:
    """The tasks of a recorded run, and which of their edges would go."""

    def __init__(self, profile: Profile, gone: Between, kept: Between) -> None:
        tasks = profile.tasks
        columns = (tasks[name] for name in ("task", "stage", "kind", "tile", "end_ns"))
        self._tasks = {
            int(number): (str(stage).split("+"), str(kind), int(tile), int(end))
            for number, stage, kind, tile, end in zip(*columns, strict=True)
        }
        self._gone, self._kept = gone, kept

    def added(self, task: int, producers: list[int], waited: int) -> int:
        """How much of a task's wait its going edges add to the others [ns]."""
        inputs = [producer for producer in producers if producer in self._tasks]
        goes = [producer for producer in inputs if self._goes(task, producer)]
        if not goes:
            return 0
        others = [self._tasks[producer][3] for producer in inputs if producer not in goes]
        last = max(self._tasks[producer][3] for producer in goes)
        return max(0, min(waited, last - max(others, default=0)))

    def _goes(self, task: int, producer: int) -> bool:
        readers, _, tile, _ = self._tasks[task]
        writers, kind, neighbour, _ = self._tasks[producer]
        if tile == neighbour or kind not in ("step", "pack"):
            return False
        joined = {(reader, tile, writer, neighbour) for reader in readers for writer in writers}
        return bool(joined & self._gone) and not joined & self._kept


def inplace_hazards(program: Program) -> list[dict[str, Any]]:
    """Writes that would overtake a neighbour's read if fields were updated in place.

    Each says which field, who reads it beyond its tile, who writes it next, across which axes, and how many
    bytes a second buffer takes. Within a tile, program order keeps reads before writes; what remains are
    anti-dependences (Bernstein's second condition, see :func:`breakstep.graph.tasks.conflicts`) across tiles.
    """
    found: dict[tuple[str, str, str], dict[str, Any]] = {}
    phases = [phase for _, phase in cycle_phases(program.template)]
    for place, reader in enumerate(phases[: len(phases) // 2]):
        for read in reader.stage.reads:
            if read.is_local:
                continue
            writer = next((w for w in phases[place:] if read.field in w.stage.writes), None)
            if writer is None:
                continue
            key = (read.field, reader.stage.name, writer.stage.name)
            found.setdefault(key, _hazard(program, read, reader, writer))
    return list(found.values())


def _hazard(program: Program, read: Read, reader: Phase, writer: Phase) -> dict[str, Any]:
    mesh, kind = program.problem.mesh, program.fields[read.field]
    rims = sum(rim.zones for tile in range(len(program.tiling)) for rim in program.plans.plan(tile, read).rims)
    return {
        "field": read.field,
        "reader": reader.stage.name,
        "writer": writer.stage.name,
        "axes": [axis for axis, width in zip("xyz", read.halo, strict=True) if width],
        "same_phase": reader.number == writer.number,
        "buffer_bytes": int(np.prod(mesh.zones)) * kind.size * 8,
        "rim_bytes": rims * kind.size * 8,
    }
