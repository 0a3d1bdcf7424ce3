"""Bytes that cross between neighbouring tiles, from recorded transfers where there are any.

A rim's size is the zones of the shared face times the bytes that a zone of the face sends. What that is, is found by
stage from what the record says crossed. Where a run moved nothing, two layers of all that the stage makes are
assumed, which is what a second-order sweep reads and more than others do.
"""

from __future__ import annotations

import numpy as np

from breakstep.forecast.lift import Lifted
from breakstep.forecast.program import Floats, Pattern, Program, Tiles
from breakstep.profile.frames import Integers, integers, positions, words_of

LAYERS = 2.0


def faces(tiles: Tiles, pattern: Pattern) -> Floats:
    """Zones of the face that two tiles share, along a pattern; 0 for a tile with itself, 1 for a corner."""
    places, shape = tiles.places, tiles.shape
    apart = places[pattern.producer] != places[pattern.consumer]
    sides = np.where(apart, 1, shape[pattern.consumer])
    return np.where(apart.any(axis=1), sides.prod(axis=1), 0).astype(np.float64)


def edge_sizes(program: Program, stage: str, pattern: Pattern) -> Integers:
    """Bytes along each edge of a pattern out of a stage, should its ends lie on two workers."""
    rows = [phase.cost for phase in program.phases if phase.stage == stage]
    made = program.costs.output[rows].max(axis=0)
    a_zone = made / program.tiles.zones
    sent = program.rim_bytes.get(stage, -1.0)
    across = faces(program.tiles, pattern)
    own = pattern.producer == pattern.consumer
    rims = across * (sent if sent >= 0.0 else LAYERS * a_zone[pattern.producer])
    return np.where(own, made[pattern.producer], rims).astype(np.int64)


def rim_bytes_of(lifted: Lifted, program: Program) -> dict[str, float]:
    """By stage, bytes that a zone of a face sent, as recorded; no entry for a stage that sent nothing."""
    profile = lifted.profile
    moved, tasks = profile.transfers, profile.tasks
    sender = positions(integers(tasks, "task"), integers(moved, "producer"))
    field, fields = words_of(moved, "field")
    tile = np.array([f not in ("value", "control") for f in fields], dtype=bool)[field] if len(moved) else field > 0
    code, stages = words_of(tasks, "stage")
    found: dict[str, float] = {}
    for stage in program.stages:
        if stage not in stages or not len(moved):
            continue
        mine = tile & (code[sender] == stages.index(stage))
        total = int(integers(moved, "bytes")[mine].sum())
        across = _crossing(lifted, program, stage)
        if across > 0:
            found[stage] = total / across
    return found


def _crossing(lifted: Lifted, program: Program, stage: str) -> float:
    """Zones of faces through which a stage's output crossed workers."""
    seen: set[tuple[int, int, int, int]] = set()
    total = 0.0
    for number, phase in enumerate(program.phases):
        for source, place in phase.reads:
            if program.phases[source].stage != stage:
                continue
            pattern = program.patterns[place]
            ends = lifted.worker[source, pattern.producer], lifted.worker[number, pattern.consumer]
            crosses = ends[0] != ends[1]
            sizes = faces(program.tiles, pattern)
            for a, b, size in zip(
                pattern.producer[crosses].tolist(), pattern.consumer[crosses].tolist(), sizes[crosses].tolist(),
                strict=True,
            ):  # fmt: skip
                key = (number, source, a, b)
                if key not in seen:
                    seen.add(key)
                    total += size
    return total
