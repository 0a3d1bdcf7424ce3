"""Random small graphs and machines for comparing replay engines: every feature, many ties."""

from __future__ import annotations

import numpy as np

from breakstep.forecast.graph import BARRIER, REDUCTION, STEP, ReplayGraph, build_graph
from breakstep.forecast.model import MachineModel

EDGE_KINDS = ("data", "reduction:one", "barrier:one", "barrier:two")


def random_graph(rng: np.random.Generator, largest: int = 60) -> ReplayGraph:
    """Steps and control nodes in program order; small durations, so that many events share a moment."""
    tasks = int(rng.integers(1, largest))
    kind = rng.choice([STEP, STEP, STEP, STEP, REDUCTION, BARRIER], size=tasks).astype(np.int8)
    label = np.where(kind == REDUCTION, 1, np.where(kind == BARRIER, rng.integers(2, 4, tasks), 0))
    pairs = [(a, b) for b in range(tasks) for a in range(b) if rng.random() < 3 / tasks]
    pairs += [pair for pair in pairs if rng.random() < 0.05]  # two fields may cross the same pair of tasks
    order = rng.permutation(len(pairs))
    producer, consumer = (np.array([pairs[at][end] for at in order], dtype=np.int64) for end in (0, 1))
    step_ends = (kind[producer] == STEP) & (kind[consumer] == STEP) if pairs else np.zeros(0, dtype=bool)
    edge_kind = np.where(step_ends, 0, np.where(kind[producer] != STEP, label[producer], label[consumer]))
    spread = int(rng.choice([3, 10, 1000]))
    return build_graph(
        np.where(kind == STEP, rng.integers(0, spread, tasks), 0),
        producer,
        consumer,
        kind=kind,
        name=label,
        edge_bytes=np.where(step_ends, rng.integers(0, 50, len(pairs)), 0),
        edge_kind=edge_kind,
        names=("task", "one", "one", "two"),
        edge_kinds=EDGE_KINDS,
    )


def random_machine(rng: np.random.Generator) -> MachineModel:
    """Overhead, latency, bandwidth, contention, threads and trees, each there or not."""
    return MachineModel(
        workers=int(rng.integers(1, 6)),
        threads=int(rng.integers(1, 4)),
        overhead_ns=int(rng.choice([0, 0, 2, 7])),
        alpha_ns=int(rng.choice([0, 3, 11])),
        ps_per_byte=int(rng.choice([0, 100, 1700])),
        contention=bool(rng.integers(2)),
        hop_ns=int(rng.choice([0, 0, 4])),
        arity=int(rng.integers(2, 5)),
    )


def random_kinds(rng: np.random.Generator, graph: ReplayGraph) -> int:
    """Most often all edges bind."""
    drop = [kind for kind in range(1, len(EDGE_KINDS)) if rng.random() < 0.15]
    return graph.without(drop)
