"""A second replay engine in plain Python, written from the tie rule alone: lists, sets and one ``heapq``.

It shares no code and no data structure with the compiled engines; it is what they are compared with.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass, field

from breakstep.forecast.graph import STEP, ReplayGraph

ARRIVE, FINISH = 0, 1


@dataclass
class Played:
    """What the plain engine found."""

    start: dict[int, int] = field(default_factory=dict)
    finish: dict[int, int] = field(default_factory=dict)
    slot: dict[int, int] = field(default_factory=dict)
    order: list[int] = field(default_factory=list)

    def makespan(self, graph: ReplayGraph) -> int:
        return max((self.finish[task] for task in range(graph.tasks) if graph.kind[task] == STEP), default=0)


class PlainReplay:
    """One run of the engine; ``owner`` None means free placement."""

    def __init__(self, graph, machine, owner=None, rank=None, kinds=-1, locality=True):
        self.graph, self.machine, self.owner, self.locality = graph, machine, owner, locality
        self.rank = [0] * graph.tasks if rank is None else [int(value) for value in rank]
        self.inputs = {task: [] for task in range(graph.tasks)}
        self.outputs = {task: [] for task in range(graph.tasks)}
        for task in range(graph.tasks):
            for edge in range(graph.first[task], graph.first[task + 1]):
                if kinds < 0 or kinds & (1 << int(graph.edge_kind[edge])):
                    producer, size = int(graph.producer[edge]), int(graph.edge_bytes[edge])
                    self.inputs[task].append((producer, size))
                    self.outputs[producer].append((task, size))
        self.missing = {task: len(self.inputs[task]) for task in self.inputs}
        self.there = dict.fromkeys(self.inputs, 0)
        self.events: list[tuple[int, int, int]] = []
        self.ready: set[int] = set()
        self.running: dict[int, int] = {}  # slot -> task
        self.link = [0] * machine.workers
        self.found = Played()

    def play(self) -> Played:
        for task in self.inputs:
            if self.missing[task] == 0:
                self.complete(task, 0)
        now = 0
        while True:
            self.hand_out(now)
            if not self.events:
                return self.found
            now = self.events[0][0]
            while self.events and self.events[0][0] == now:
                _, what, task = heapq.heappop(self.events)
                if what == ARRIVE:
                    self.ready.add(task)
                else:
                    self.end(task, now)

    def is_step(self, task: int) -> bool:
        return bool(self.graph.kind[task] == STEP)

    def complete(self, task: int, now: int) -> None:
        """The last input is booked; it is there at ``self.there[task]``."""
        if not self.is_step(task):
            self.found.start[task] = self.there[task]
            release = self.there[task] + self.machine.tree_ns + int(self.graph.duration_ns[task])
            heapq.heappush(self.events, (release, FINISH, task))
        elif self.there[task] > now:
            heapq.heappush(self.events, (self.there[task], ARRIVE, task))
        else:
            self.ready.add(task)

    def end(self, task: int, now: int) -> None:
        self.found.finish[task] = now
        self.found.order.append(task)
        if self.is_step(task):
            del self.running[self.found.slot[task]]
        for other, size in sorted(self.outputs[task], key=lambda output: output[0]):
            moment = now
            both = self.owner is not None and self.is_step(task) and self.is_step(other)
            if both and self.owner[task] != self.owner[other]:
                moment = self.sent(now, int(self.owner[other]), size)
            self.there[other] = max(self.there[other], moment)
            self.missing[other] -= 1
            if self.missing[other] == 0:
                self.complete(other, now)

    def sent(self, now: int, worker: int, size: int) -> int:
        carried = size * self.machine.ps_per_byte // 1000
        if not self.machine.contention:
            return now + self.machine.alpha_ns + carried
        self.link[worker] = max(self.link[worker], now + self.machine.alpha_ns) + carried
        return self.link[worker]

    def free_slots(self, worker: int) -> list[int]:
        threads = self.machine.threads
        return [slot for slot in range(worker * threads, (worker + 1) * threads) if slot not in self.running]

    def hand_out(self, now: int) -> None:
        for task in sorted(self.ready, key=lambda one: (self.rank[one], one)):
            worker = self.pick(task)
            slots = self.free_slots(worker) if worker is not None else []
            if slots:
                self.ready.remove(task)
                self.begin(task, worker, slots[0], now)

    def pick(self, task: int) -> int | None:
        if self.owner is not None:
            return int(self.owner[task])
        free = [worker for worker in range(self.machine.workers) if self.free_slots(worker)]
        if not free:
            return None
        held = dict.fromkeys(free, 0)
        for producer, size in self.inputs[task]:
            if self.is_step(producer):
                worker = self.found.slot[producer] // self.machine.threads
                if worker in held:
                    held[worker] += size
        if not self.locality or max(held.values()) == 0:
            return min(free)
        return min(free, key=lambda worker: (-held[worker], worker))

    def begin(self, task: int, worker: int, slot: int, now: int) -> None:
        begin = now
        if self.owner is None:
            for producer, size in self.inputs[task]:
                if self.is_step(producer) and self.found.slot[producer] // self.machine.threads != worker:
                    begin = max(begin, self.sent(now, worker, size))
        self.running[slot] = task
        self.found.slot[task] = slot
        self.found.start[task] = begin
        end = begin + self.machine.overhead_ns + int(self.graph.duration_ns[task])
        heapq.heappush(self.events, (end, FINISH, task))
