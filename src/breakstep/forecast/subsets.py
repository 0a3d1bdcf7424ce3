"""Every subset of a few kinds of barriers and reductions removed: gains neither add nor come alone.

A subset is an index: bit j of it says that ``kinds[j]`` is removed. So index 0 is the graph as it is, and the last
index is the graph with none of them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor

import numpy as np
from numpy.typing import NDArray

from breakstep.errors import ForecastError
from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.fixed import Schedule, Variant, fixed_makespans
from breakstep.forecast.graph import Int32s, Int64s, ReplayGraph
from breakstep.forecast.model import MachineModel

MOST_KINDS = 8  # 256 subsets


def subset_makespans(graph: ReplayGraph, machine: MachineModel, schedule: Schedule, kinds: Sequence[int]) -> Int64s:
    """Makespan without each subset of edge kinds [ns], shape (2 ** len(kinds),); every thread keeps its order.

    Monotone: removing more never makes it longer.
    """
    masks = _masks(graph, kinds)
    return fixed_makespans(graph, schedule, [Variant(machine, mask) for mask in masks])


def subset_replays(
    graph: ReplayGraph,
    machine: MachineModel,
    owner: Int32s,
    kinds: Sequence[int],
    rank: Int32s | None = None,
    jobs: int = 2,
) -> Int64s:
    """The same, with the order decided while it plays: removing a kind may make it longer (Graham's anomalies)."""
    masks = _masks(graph, kinds)
    graph.outgoing  # noqa: B018  (made once, before the threads share it)
    with ThreadPoolExecutor(max(1, jobs)) as pool:
        found = pool.map(lambda mask: replay_owner(graph, machine, owner, rank, mask).makespan_ns, masks)
        return np.array(list(found), dtype=np.int64)


def fair_shares(makespans: Int64s) -> NDArray[np.float64]:
    """Each kind's Shapley share of the whole gain [ns], shape (kinds,): its mean gain over all orders of removal.

    The shares sum to ``makespans[0] - makespans[-1]`` (L. S. Shapley, 1953, from memory).
    """
    count = len(makespans).bit_length() - 1
    share = np.zeros(count)
    for subset, before in enumerate(makespans.tolist()):
        size = subset.bit_count()
        for kind in range(count):
            if not subset >> kind & 1:
                weight = math.factorial(size) * math.factorial(count - size - 1) / math.factorial(count)
                share[kind] += weight * (before - int(makespans[subset | 1 << kind]))
    return share


def best_order(makespans: Int64s) -> list[tuple[int, int]]:
    """Kinds in the order in which the best set of each size grows most, greedily: (kind, its gain then [ns])."""
    count = len(makespans).bit_length() - 1
    removed, order = 0, []
    for _ in range(count):
        left = [kind for kind in range(count) if not removed >> kind & 1]
        best = min(left, key=lambda kind: (int(makespans[removed | 1 << kind]), kind))
        order.append((best, int(makespans[removed] - makespans[removed | 1 << best])))
        removed |= 1 << best
    return order


def _masks(graph: ReplayGraph, kinds: Sequence[int]) -> list[int]:
    if len(kinds) > MOST_KINDS:
        raise ForecastError(f"{len(kinds)} kinds were given; expected at most {MOST_KINDS}, which are 256 subsets.")
    return [
        graph.without([kind for place, kind in enumerate(kinds) if subset >> place & 1])
        for subset in range(1 << len(kinds))
    ]
