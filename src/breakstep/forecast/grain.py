"""The grain: the same mesh in tiles of other sizes, and what that does to both modes and to the accounts.

Fine tiles spread hot spots and overlap more, and pay the dispatch more often. How costs are put together for tiles that
were not recorded, and where that flatters, is said in :mod:`breakstep.forecast.retile`.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from breakstep.forecast.answer import MODES, kinds_of
from breakstep.forecast.basis import Basis
from breakstep.forecast.machines import Machine
from breakstep.forecast.question import Question
from breakstep.forecast.retile import tile_shapes
from breakstep.forecast.scene import Scene

MOST_TASKS = 400_000  # beyond, a size is left out: it would take longer than all others together


def grain_row(scene: Scene, shape: tuple[int, ...]) -> dict[str, Any]:
    """Both modes for one tile shape; accounts are those of the tasked run, all threads together [s]."""
    tasked = kinds_of(scene, "tasked")
    replay, model = scene.play(tasked), scene.setting.model
    spans = {f"{mode}_s": scene.expected_ns(kinds_of(scene, mode)) * 1e-9 for mode in MODES}
    whole = float(replay.busy_ns.sum()) * 1e-9
    kernels = scene.kernel_ns(tasked) * 1e-9
    return {
        "tile": list(shape),
        "tiles": scene.program.tile_count,
        "tasks": scene.program.tasks,
        **spans,
        "compute_s": kernels,
        "engine_s": float(replay.overhead_ns.sum()) * 1e-9 + max(whole - kernels, 0.0),
        "wait_s": float(replay.idle_ns.sum()) * 1e-9,
        "workers": model.workers,
        "moved_bytes": int(replay.received_bytes.sum()),
        "memory_bytes": scene.memory(replay),
    }


def grain_rows(basis: Basis, machine: Machine, question: Question, workers: int) -> list[dict[str, Any]]:
    """One row for each tile shape, the coarsest first; shapes with fewer tiles than workers are left out."""
    dimensions = _dimensions(basis)
    rows = []
    for shape in tile_shapes(basis.program.tiles):
        asked = () if shape == recorded_tile(basis) else shape
        if _tasks(basis, shape) > MOST_TASKS:
            continue
        scene = Scene.of(basis, machine, replace(question, tile=asked), workers)
        if scene.program.tile_count >= workers:
            rows.append(grain_row(scene, shape[:dimensions]))
    return rows


def recorded_tile(basis: Basis) -> tuple[int, int, int]:
    """Zones of the largest recorded tile along each axis."""
    x, y, z = basis.program.tiles.shape.max(axis=0).tolist()
    return x, y, z


def _dimensions(basis: Basis) -> int:
    mesh = (basis.program.tiles.origin + basis.program.tiles.shape).max(axis=0).tolist()
    return max(axis + 1 for axis in range(3) if mesh[axis] > 1 or axis == 0)


def _tasks(basis: Basis, shape: tuple[int, int, int]) -> int:
    tiles = 1
    for axis, zones in enumerate((basis.program.tiles.origin + basis.program.tiles.shape).max(axis=0).tolist()):
        tiles *= -(-zones // shape[axis])
    return tiles * len(basis.program.phases)
