"""The trees that make results of reductions, as far as their nodes live on one worker.

All own nodes of a tree are opened when its phase is emitted, and each is dropped when it has combined its parts; so a
part that finds no open node of a phase that is emitted has come before. Other workers may be ahead: their
parts are kept until the phase is emitted here.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeAlias

from breakstep.engine.resident.plan import ReductionTree, WorkerPlan
from breakstep.engine.resident.results import Results
from breakstep.engine.resident.states import Exits, Finish, SendItem, Waiter
from breakstep.graph.tasks import TREE_ARITY
from breakstep.graph.unroll import Making, Phase
from breakstep.steps.reduction import combine
from breakstep.steps.step import Array

Place: TypeAlias = tuple[int, int, int]  # instance, level, index

ABSENT: Any = object()  # None is a part: of a task that handed its fields on


class Node(Waiter):
    """One node of one tree while its parts come in; the root also waits for the result before its own."""

    __slots__ = ("making", "parts", "phase", "place")

    def __init__(self, place: Place, children: int, making: Making, phase: Phase) -> None:
        super().__init__(children)
        self.place, self.making, self.phase = place, making, phase
        self.parts: list[Any] = [ABSENT] * children


class Reductions:
    """Own nodes of all trees under way.

    Parameters
    ----------
    made : callable
        ``made(instance, vector)``: a root here has made a result.
    """

    def __init__(
        self, plan: WorkerPlan, workers: int, results: Results, exits: Exits, made: Callable[[int, Array], None]
    ) -> None:
        self.tree = ReductionTree(plan.owners)
        self.nodes: dict[Place, Node] = {}
        self.early: dict[int, dict[tuple[int, int], Array | None]] = {}
        self._me, self._workers = plan.worker, workers
        self._own = [node for node in self.tree.nodes.values() if node.home == self._me]
        self._results, self._exits, self._made = results, exits, made

    def open(self, making: Making, phase: Phase) -> None:
        """A phase that feeds a tree has been emitted."""
        instance = making.instance
        for shape in self._own:
            place = (instance, shape.level, shape.index)
            node = self.nodes[place] = Node(place, shape.children, making, phase)
            if shape.level == self.tree.top and making.previous is not None:
                self._results.need(making.previous, node)
        for (level, index), vector in self.early.pop(instance, {}).items():
            self.part(instance, level, index, vector)

    def part(self, instance: int, level: int, index: int, vector: Array | None) -> None:
        """A part of a node (a tile's contribution at level 0): kept here, or sent to the node's home."""
        parent, child = divmod(index, TREE_ARITY)
        home = self.tree.nodes[level, parent].home
        if home != self._me:
            self._exits.out.append(SendItem(home, ("part", instance, level, index), vector))
        elif instance >= self._results.announced:
            self.early.setdefault(instance, {})[level, index] = vector
        else:
            node = self.nodes.get((instance, level, parent))
            if node is not None and node.parts[child] is ABSENT:
                node.parts[child] = vector
                self._exits.satisfy(node)

    def combine(self, node: Node) -> None:
        """A node has all its parts."""
        instance, level, index = node.place
        del self.nodes[node.place]
        combined = combine(node.making.reduction.combine, node.parts)
        if level < self.tree.top:
            self._exits.control("combine", node.phase, node.place)
            self.part(instance, level + 1, index, combined)
            return
        making = node.making
        previous = self._results.known[making.previous][-1] if making.previous is not None else None
        self._exits.out.append(Finish(node.phase, node.place, making, combined, previous))

    def finished(self, order: Finish, vector: Array) -> None:
        """A root's result has been worked out: for the other workers, and for this one."""
        instance = order.place[0]
        self._exits.control("combine", order.phase, order.place)
        others = (worker for worker in range(self._workers) if worker != self._me)
        self._exits.out.extend(SendItem(worker, ("value", instance), vector) for worker in others)
        self._made(instance, vector)
