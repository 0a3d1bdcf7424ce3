"""What dispatching a task costs that does nothing: CPU time and wall time, by either dispatch.

A long and a short run of the same graph are measured, and the cost of a task is the difference between them
over the difference in tasks: what a run costs once, from the clocks' handshake to fetching the final state,
drops out. Runs are not recorded; what recording adds is measured apart.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from breakstep.engine.run import RunOptions
from breakstep.measure.bench import DISPATCHES, Bench, Usage
from breakstep.measure.noop import Ring
from breakstep.measure.timing import Spread, in_turn

RIM_NUMBERS = 2048  # 16 KB: two rows of 32 zones with 32 numbers each
Sizes = Mapping[str, tuple[int, int]]
"""Step tasks of the short and of the long run, by dispatch."""

# Natively on 256 tiles, the difference between one and two cycles gave 810 and 1856 us a task in two runs, that
# between one and four 1378 and 1560, that between one and six 1433 and 1384.
SIZES: Sizes = {"native": (256, 1536), "resident": (1024, 9216)}


@dataclass(frozen=True)
class Case:
    """One halo graph and who owns its tiles."""

    grid: tuple[int, ...]
    placement: str = "blocks"
    components: int = 1

    def ring(self, tasks: int) -> Ring:
        """The graph with at least so many tasks."""
        one = Ring(self.grid, 1, self.components)
        return replace(one, cycles=max(1, tasks // one.tiles))

    def facts(self) -> dict[str, Any]:
        """The case in plain figures."""
        return {
            "tiles": Ring(self.grid, 1).tiles,
            "inputs": 1 + 2 * len(self.grid),
            "placement": self.placement,
            "rim_bytes": 8 * self.components,
        }


HEADLINE = Case((256,))
WORST = Case((256,), "cyclic", RIM_NUMBERS)
ALL = (
    *(Case((n,), place, size) for n in (32, 256) for place in ("blocks", "cyclic") for size in (1, RIM_NUMBERS)),
    Case((16, 16)),
)


def cost_of_task(bench: Bench, dispatch: str, case: Case, sizes: Sizes, record: bool = False) -> Usage:
    """What one more task costs [s]."""
    options = RunOptions(placement=case.placement, record=record)
    short, long = (case.ring(tasks) for tasks in sizes[dispatch])
    before, after = (bench.run(dispatch, ring, options) for ring in (short, long))
    return (after - before).scaled(1.0 / (long.tasks - short.tasks))


def cost_row(
    bench: Bench, case: Case, sizes: Sizes, rounds: int, dispatches: Sequence[str] = DISPATCHES
) -> dict[str, Any]:
    """One case by the dispatches in turn, in plain figures."""
    samples: dict[str, list[Usage]] = {name: [] for name in dispatches}
    for number in range(rounds):
        for name in in_turn(dispatches, number):
            samples[name].append(cost_of_task(bench, name, case, sizes))
    row = {**case.facts(), "workers": bench.workers, "threads": bench.threads}
    row |= {name: figures_of(found) for name, found in samples.items()}
    row["ratio"] = _ratio(samples)
    return row


def recording_noop(bench: Bench, sizes: Sizes, rounds: int) -> dict[str, float]:
    """CPU time that recording adds to a resident task that does nothing [us], edges worked out included."""
    added = []
    for number in range(rounds):
        costs = {record: cost_of_task(bench, "resident", HEADLINE, sizes, record) for record in _on_and_off(number)}
        added.append(1e6 * (costs[True].cpu - costs[False].cpu))
    return spread(added)


def share_of_task(added_us: Mapping[str, float], task_ms: float) -> dict[str, float]:
    """What a cost per task is of a task of that length: steadier than two spans compared on a busy machine."""
    return {name: us * 1e-3 / task_ms for name, us in added_us.items()}


def _on_and_off(number: int) -> tuple[bool, bool]:
    return (True, False) if number % 2 == 0 else (False, True)


def figures_of(samples: Sequence[Usage]) -> dict[str, Any]:
    """Microseconds a task."""
    return {
        "cpu_us": spread([1e6 * one.cpu for one in samples]),
        "wall_us": spread([1e6 * one.wall for one in samples]),
        "client_cpu_us": spread([1e6 * one.client for one in samples]),
        "worker_cpu_us": spread([1e6 * one.workers for one in samples]),
    }


def _ratio(samples: Mapping[str, Sequence[Usage]]) -> dict[str, float] | None:
    """CPU time of native over resident, round by round."""
    if set(samples) != set(DISPATCHES):
        return None
    pairs = zip(samples["native"], samples["resident"], strict=True)
    return spread([native.cpu / resident.cpu for native, resident in pairs])


def spread(values: Sequence[float]) -> dict[str, float]:
    """Median and quartiles as plain figures."""
    found = Spread.of(values)
    return {"median": found.median, "low": found.low, "high": found.high}
