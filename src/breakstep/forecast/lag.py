"""The same graph with a reduction's result used later, as if its lag had been larger from the beginning."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from breakstep.errors import ForecastError
from breakstep.forecast.graph import REDUCTION, Int64s, ReplayGraph


def with_lag(graph: ReplayGraph, edge_kind: int, cycles: int = 0, iterations: int = 0) -> ReplayGraph:
    """Let every step use the value that the reduction had some cycles, or iterations, before.

    Where there is no such value, at the beginning of the run or of a repeat, the step waits for none. Durations
    stay: a lag's price in extra iterations or shorter time steps is not in the graph.

    Parameters
    ----------
    graph : ReplayGraph
    edge_kind : int
        The reduction, a position in ``graph.edge_kinds``.
    cycles, iterations : int
        How much later; both 0 or more.

    Raises
    ------
    ForecastError
        The edge kind is no reduction's, or the lag is negative.
    """
    of_kind = graph.edge_kind == edge_kind
    uses = of_kind & (graph.kind[graph.producer] == REDUCTION)
    if min(cycles, iterations) < 0 or not np.any(uses):
        raise ForecastError(
            f"Edge kind {edge_kind} with a lag of {cycles} cycles and {iterations} iterations was given;"
            f" expected one of the reductions {graph.kinds_of('reduction:')} and lags of 0 or more."
        )
    earlier = _earlier(graph, cycles, iterations)
    producer = graph.producer.astype(np.int64)
    producer[uses] = earlier[producer[uses]]
    kept = producer >= 0
    counts = np.bincount(graph.consumer[kept], minlength=graph.tasks)
    first = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    return replace(
        graph,
        first=first,
        producer=producer[kept].astype(np.int32),
        edge_bytes=graph.edge_bytes[kept],
        edge_kind=graph.edge_kind[kept],
    )


def _earlier(graph: ReplayGraph, cycles: int, iterations: int) -> Int64s:
    """For each reduction node the node of the same name so much earlier, -1 for none; shape (tasks,)."""
    nodes = np.flatnonzero(graph.kind == REDUCTION)
    keys = zip(graph.name[nodes], graph.cycle[nodes], graph.iteration[nodes], strict=True)
    number = {
        (int(name), int(cycle), int(turn)): int(node) for node, (name, cycle, turn) in zip(nodes, keys, strict=True)
    }
    found = np.full(graph.tasks, -1, dtype=np.int64)
    for (name, cycle, turn), node in number.items():
        found[node] = number.get((name, cycle - cycles, turn - iterations), -1)
    return found
