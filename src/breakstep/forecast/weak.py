"""A mesh that grows with the workers: copies of the recorded costs laid side by side, never stored task by task.

Every phase of the record becomes a stage with the recorded cost of each tile as its map; copies are mirrored, so
that no seam shows, and each task's cost is drawn anew with what repeats of its stage showed. So hot spots are as many
per worker as they were, and move as they moved. A task waits for neighbours' tasks of the phase before, also where
it reads an older one: the coupling is a little tighter than the program's. Bounds are those of mean costs.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from breakstep.errors import ForecastError
from breakstep.forecast.basis import Basis
from breakstep.forecast.implicit import replay_tiles
from breakstep.forecast.laws import Cost, Law, laid_over
from breakstep.forecast.machines import Machine
from breakstep.forecast.program import Floats, Program
from breakstep.forecast.question import Question
from breakstep.forecast.retile import offsets_of
from breakstep.forecast.rims import edge_sizes
from breakstep.forecast.scene import Scene
from breakstep.forecast.setting import changed_program, setting_of
from breakstep.forecast.sweep import sweep_tiles
from breakstep.forecast.tiles import Gate, Offset, TiledSplitting, TileStage
from breakstep.forecast.waits import waits

MOST_TASKS = 300_000_000  # event by event, a minute or two for both modes and all repeats
MOST_SWEPT = 3_000_000_000  # with one tile a worker, which needs no events
REPEATS = 3  # with other seeds, for the interval


def weak_row(basis: Basis, machine: Machine, question: Question, workers: int) -> dict[str, Any]:
    """Both modes with ``question.weak`` tiles for each of so many workers.

    Raises
    ------
    ForecastError
        More tasks than can be played.
    """
    tasks = workers * question.weak * len(changed_program(basis.program, question).phases)
    if tasks > (MOST_TASKS if question.weak > 1 else MOST_SWEPT):
        raise ForecastError(
            f"weak={question.weak}: {workers} workers have {tasks:.3g} tasks, more than can be played; ask for fewer"
            " workers, or for weak=1"
        )
    splitting, scene = weak_splitting(basis, machine, question, workers)
    model = replace(setting_of(basis, machine, question, workers).model, contention=False)
    row: dict[str, Any] = {
        "workers": workers,
        "threads": model.threads,
        "busy_workers": workers,
        "cores": machine.slots,
    }
    work = mean_work_ns(splitting, scene)
    for mode, tiled in (("lockstep", splitting.lockstep()), ("tasked", splitting)):
        spans = [_played(replace(tiled, seed=seed), model, question.weak) * 1e-9 for seed in range(1, 1 + REPEATS)]
        middle, half = float(np.mean(spans)), 1.96 * float(np.std(spans, ddof=1))
        row |= {f"{mode}_s": middle, f"{mode}_low_s": max(middle - half, 0.0), f"{mode}_high_s": middle + half}
        row[f"{mode}_efficiency"] = work * 1e-9 / (workers * middle)
    path = float(stage_path_ns(splitting).max()) * 1e-9
    area = total_ns(splitting, model.overhead_ns) / workers * 1e-9
    return row | {
        "tasked_fixed_s": row["tasked_s"],
        "area_bound_s": area,
        "path_bound_s": path,
        "worker_bound_s": area if question.weak > 1 else path,
        "memory_bytes": 0,
        "moved_bytes": 0,
        "fits_memory": True,
    }


def _played(splitting: TiledSplitting, model: Any, per_worker: int) -> int:
    if per_worker == 1:
        return sweep_tiles(splitting, model).makespan_ns
    owner = (np.arange(splitting.tiles) // per_worker).astype(np.int32)
    return replay_tiles(splitting, model, owner).makespan_ns


def weak_splitting(basis: Basis, machine: Machine, question: Question, workers: int) -> tuple[TiledSplitting, Scene]:
    """The recorded phases on as many tiles as the workers need, and the recorded program's own scene there."""
    few = min(workers, basis.program.tile_count)
    scene = Scene.of(basis, machine, replace(question, weak=0), few)
    program = scene.program
    axes = [axis for axis in range(3) if program.tiles.grid[axis] > 1] or [0]
    recorded = tuple(program.tiles.grid[axis] for axis in axes)
    shape = grown(workers * question.weak, len(axes))
    cell = laid_over(recorded, shape, repeat=True)
    costs = np.rint(scene.step_ns(scene.unfolded.tasked)).astype(np.int64)
    laws = {stage: Law.measured(pool) for stage, pool in basis.noise.tasks.items()}
    gates = _gates(program)
    stages = tuple(
        TileStage(
            Cost(costs[number][None, :], cell, laws[phase.stage]),
            _neighbours(program, number, axes),
            _halo_bytes(program, number),
            gates.get(number, ()),
        )
        for number, phase in enumerate(program.phases)
    )
    return TiledSplitting(shape, 1, stages, all(program.tiles.periodic[axis] for axis in axes)), scene


def grown(tiles: int, axes: int) -> tuple[int, ...]:
    """So many tiles along each axis, as nearly a cube as the number allows, the longest axis first."""
    shape: list[int] = []
    for left in range(axes, 0, -1):
        side = round(tiles ** (1.0 / left))
        side = next(n for n in range(max(side, 1), 0, -1) if tiles % n == 0) if left > 1 else tiles
        shape.append(side)
        tiles //= side
    return tuple(sorted(shape, reverse=True))


def _gates(program: Program) -> dict[int, tuple[Gate, ...]]:
    """By phase, the reductions that it waits for."""
    found: dict[int, dict[Gate, None]] = {}
    for wait in waits(program):
        found.setdefault(wait.used_by, {})[Gate(wait.made_by, 0)] = None
    return {number: tuple(gates) for number, gates in found.items()}


def _neighbours(program: Program, number: int, axes: list[int]) -> tuple[Offset, ...]:
    """Offsets read by a phase along the axes that have tiles, each with its opposite."""
    found: set[Offset] = set()
    for _, place in program.phases[number].reads:
        for offset in offsets_of(program.tiles, program.patterns[place]):
            kept = [offset[axis] for axis in axes] + [0, 0, 0]
            found |= {(kept[0], kept[1], kept[2]), (-kept[0], -kept[1], -kept[2])}
    return tuple(sorted(found - {(0, 0, 0)}))


def _halo_bytes(program: Program, number: int) -> int:
    """Mean bytes from one neighbour, for the phase that reads them."""
    sizes = []
    for source, place in program.phases[number].reads:
        pattern = program.patterns[place]
        other = pattern.producer != pattern.consumer
        if np.any(other):
            sizes.append(float(edge_sizes(program, program.phases[source].stage, pattern)[other].mean()))
    return round(max(sizes, default=0.0))


def mean_work_ns(splitting: TiledSplitting, scene: Scene) -> float:
    """Kernels on an idle machine, of all tiles together [ns]."""
    return scene.work_ns(scene.unfolded.tasked) * splitting.tiles / scene.program.tile_count


def total_ns(splitting: TiledSplitting, overhead_ns: int) -> float:
    """All work and overhead [ns]."""
    tiles = splitting.tiles
    work = sum(float(stage.cost.pattern_ns[0][stage.cost.cell].sum()) for stage in splitting.stages)
    return work + float(overhead_ns) * tiles * len(splitting.stages)


def stage_path_ns(splitting: TiledSplitting) -> Floats:
    """Each tile's own tasks one after the other, shape (tiles,): no run of mean costs is shorter [ns].

    By tile, not by cell of the recorded map: few tiles may not reach the recorded hot spot.
    """
    stages = (stage.cost for stage in splitting.stages)
    return np.asarray(sum(cost.pattern_ns[0][cost.cell].astype(np.float64) for cost in stages))
