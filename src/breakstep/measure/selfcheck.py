"""All measurements of the tool by itself in one go, as plain figures.

Knows what is measured and how much of it. Refuses to know how figures are shown.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from breakstep.measure import cost
from breakstep.measure.bench import Bench, Machine, open_bench
from breakstep.measure.cost import Case, Sizes, cost_row, recording_noop, share_of_task
from breakstep.measure.grain import grain_figures
from breakstep.measure.limits import cores
from breakstep.measure.long_run import CYCLES, long_figures
from breakstep.measure.noop import Pace
from breakstep.measure.pairs import lockstep_figures, recording_figures
from breakstep.measure.recording import calls_us
from breakstep.measure.sharing import sharing_rows

RECORDING_LIMIT = 0.01  # of a task of 5 ms: more would show in the accounts that recording is there for
CALL_ROUNDS = 9  # 0.2 s each
BUSY = 0.1  # cores: more than a machine at rest takes for itself

Report = Callable[[str], None]


@dataclass(frozen=True)
class Extent:
    """How much of everything to measure.

    Attributes
    ----------
    rounds : int
        Turns of each contender.
    cases : tuple of Case
        Graphs on which the cost of a task is measured, the headline's among them.
    sizes : mapping of str to (int, int)
        Tasks of the short and the long run between which that cost is the difference, by dispatch.
    lengths : dict of str to tuple of float
        Lengths of kernels for the grain of each dispatch [ms].
    shared : tuple of float
        Lengths of kernels for threads against processes [ms].
    seconds, shared_seconds : float
        How long a run for the grain, and one of the latter kind, should keep each thread busy. In 0.2 s, the
        run's beginning and end still showed in the grain.
    pairs, pair_cycles : int
        Runs side by side, and cycles of each; 80 ms a cycle on two cores.
    long_cycles : int
        Cycles of the long run; 0 to leave it out.
    idle_seconds : float
        How long to watch a cluster idle.
    """

    rounds: int
    cases: tuple[Case, ...]
    sizes: Sizes
    lengths: dict[str, tuple[float, ...]]
    shared: tuple[float, ...]
    seconds: float
    shared_seconds: float
    pairs: int
    pair_cycles: int
    long_cycles: int
    idle_seconds: float


FULL = Extent(
    rounds=3,
    cases=cost.ALL,
    sizes=cost.SIZES,
    lengths={"resident": (0.2, 0.5, 1.0, 2.0, 5.0, 10.0), "native": (5.0, 10.0, 20.0, 50.0)},
    shared=(0.5, 2.0, 5.0),
    seconds=0.5,
    shared_seconds=0.5,
    pairs=7,
    pair_cycles=5,
    long_cycles=CYCLES,
    idle_seconds=2.0,
)
QUICK = Extent(
    rounds=2,
    cases=(cost.HEADLINE, cost.WORST),
    sizes=cost.SIZES,
    lengths={"resident": (0.5, 2.0), "native": (10.0, 25.0)},
    shared=(0.5, 5.0),
    seconds=0.5,
    shared_seconds=0.25,
    pairs=5,
    pair_cycles=3,
    long_cycles=0,
    idle_seconds=1.0,
)


def _silent(what: str) -> None:
    """Report nothing."""


def selfcheck_figures(
    workers: int = 2, quick: bool = False, progress: Report = _silent, extent: Extent | None = None
) -> dict[str, Any]:
    """Measure everything.

    Parameters
    ----------
    workers : int
        Worker processes of one thread; also the threads of the one worker they are compared with.
    quick : bool
        Less of everything and no long run: less to be trusted.
    progress : callable
        Told what comes next.
    extent : Extent, optional
        How much to measure; by default what ``quick`` says.

    Returns
    -------
    dict
        Plain figures, ready for JSON.

    Raises
    ------
    BreakstepError
        A run failed, or gave a wrong answer.
    """
    extent = extent or (QUICK if quick else FULL)
    before, pace = Machine.now(), Pace.measured()
    with open_bench(workers, 1, extent.idle_seconds) as processes:
        figures = _on_processes(processes, extent, pace, progress)
        with open_bench(1, workers, extent.idle_seconds) as threads:
            figures |= _with_threads(processes, threads, extent, pace, progress)
    after = Machine.now()  # only now have the workers ended, and count as our work
    facts = {"quick": quick, "cores": cores(), "workers": workers, "rounds": extent.rounds}
    others = after.others_since(before)
    return {
        **facts,
        **headline(figures),
        **figures,
        "others_cores": others,
        "seconds": after.wall - before.wall,
        "warnings": warnings(cores(), workers, others, quick),
    }


def _on_processes(bench: Bench, extent: Extent, pace: Pace, progress: Report) -> dict[str, Any]:
    progress("the cost of a task")
    costs = [cost_row(bench, case, extent.sizes, extent.rounds) for case in extent.cases]
    progress("the grain")
    grains = {
        name: grain_figures(bench, name, lengths, pace, extent.rounds, extent.seconds)
        for name, lengths in extent.lengths.items()
    }
    progress("recording, lockstep against itself, balanced work")
    recording = recording_figures(bench, pace, extent.pairs, extent.pair_cycles)
    recording["noop_cpu_us"] = recording_noop(bench, extent.sizes, extent.rounds)
    recording["calls_cpu_us"] = calls_us(CALL_ROUNDS)
    recording["share"] = share_of_task(recording["calls_cpu_us"], recording["task_ms"])
    recording["limit"] = RECORDING_LIMIT
    gains = lockstep_figures(bench, pace, extent.pairs, extent.pair_cycles)
    if extent.long_cycles:
        progress("a long run")
    long_run = long_figures(bench, extent.long_cycles) if extent.long_cycles else None
    idle = bench.idle.scaled(1.0 / bench.idle.wall)
    return {
        "idle_cores": {"client": idle.client, "workers": idle.workers},
        "costs": costs,
        "grain": grains,
        "recording": recording,
        **gains,
        "long_run": long_run,
    }


def _with_threads(processes: Bench, threads: Bench, extent: Extent, pace: Pace, progress: Report) -> dict[str, Any]:
    progress("threads against processes")
    row = cost_row(threads, cost.HEADLINE, extent.sizes, extent.rounds, ["resident"])
    benches = {"threads": threads, "processes": processes}
    sharing = sharing_rows(benches, extent.shared, pace, extent.rounds, extent.shared_seconds)
    return {"threads_cost": row, "sharing": sharing}


def headline(figures: dict[str, Any]) -> dict[str, Any]:
    """The figures that stand for all: of the ring of 256 tiles in blocks, with rims of one number."""
    facts = cost.HEADLINE.facts()
    row = next(row for row in figures["costs"] if facts.items() <= row.items())
    return {
        "native_cpu_us_per_task": row["native"]["cpu_us"]["median"],
        "resident_cpu_us_per_task": row["resident"]["cpu_us"]["median"],
        "ratio": row["ratio"]["median"],
        "grain_ms": {name: figures["grain"][name]["median"] for name in ("native", "resident")},
        "recording_cost": figures["recording"]["median"],
    }


def warnings(available: int, workers: int, others: float | None, quick: bool) -> list[str]:
    """What makes the figures say less than they seem to."""
    found = []
    if available < workers:
        found.append(f"{workers} workers share {available} cores; figures are of a machine that is too small.")
    if others is not None and others > BUSY:
        found.append(f"other programs kept {others:.1f} cores busy; wall times and waits include them.")
    if quick:
        found.append("few and short rounds, no long run; judge by a full run.")
    return found
