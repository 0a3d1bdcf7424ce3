"""What a comparison of lockstep and tasked says, worked out from the recorded profiles alone.

The accounts shown are those of the pair with the median gain, so that they are the accounts of real runs;
the gain and its interval come from all pairs.
"""

from __future__ import annotations

import math
import statistics
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import pandas as pd

from breakstep.profile.ledger import ACCOUNTS, Ledger
from breakstep.profile.run import Profile
from breakstep.profile.statistics import Gain, gain_of_pairs
from breakstep.report.trust import trust_of


@dataclass(frozen=True)
class Difference:
    """Where two runs that should agree do not.

    ``step`` and ``cycle`` are empty and -2 when only the final fields are known to differ.
    """

    field: str
    tile: int
    step: str = ""
    cycle: int = -2


@dataclass(frozen=True)
class Comparison:
    """Pairs of runs of one scenario, the first of each pair with barriers.

    Attributes
    ----------
    lockstep, tasked : sequence of Profile
        Complete runs, pair by pair.
    difference : Difference or None
        Where the final fields differ first; None when all runs agree to the last bit.
    """

    lockstep: Sequence[Profile]
    tasked: Sequence[Profile]
    difference: Difference | None = None

    @cached_property
    def gain(self) -> Gain:
        """Lockstep over tasked span."""
        spans = [[p.ledger.span_ns / 1e9 for p in side] for side in (self.lockstep, self.tasked)]
        return gain_of_pairs(*spans)

    @property
    def identical(self) -> bool:
        """Whether all runs ended in the same bits."""
        return self.difference is None

    @cached_property
    def shown(self) -> tuple[Profile, Profile]:
        """The pair with the median gain (the lower of two middle ones)."""
        ratios = list(self.gain.ratios)
        middle = ratios.index(statistics.median_low(ratios))
        return self.lockstep[middle], self.tasked[middle]

    def as_json(self) -> dict[str, Any]:
        """The figures under the documented keys."""
        lockstep, tasked = self.shown
        return {
            "scenario": lockstep.manifest["scenario"]["name"],
            "identical": self.identical,
            "difference": None if self.difference is None else vars(self.difference),
            "pairs": len(self.lockstep),
            "workers": lockstep.manifest["workers"],
            "threads": lockstep.manifest["threads"],
            "dispatch": lockstep.manifest["dispatch"],
            "gain": {
                "median": self.gain.median,
                "low": self.gain.low,
                "high": self.gain.high,
                "significant": self.gain.significant,
                "ratios": list(self.gain.ratios),
            },
            "lockstep": run_figures(lockstep),
            "tasked": run_figures(tasked),
        }


def run_figures(profile: Profile) -> dict[str, Any]:
    """One run's figures under the documented keys; null where a ratio has nothing to compare."""
    ledger, imbalance = profile.ledger, profile.imbalance
    figures = {
        "seconds": ledger.span_ns / 1e9,
        "tasks": len(profile.tasks),
        "cycles": profile.manifest["cycles"],
        "core_seconds": {account: ledger.accounts_seconds[account] for account in ACCOUNTS},
        "closure_error": ledger.closure_error,
        "efficiency": _efficiency(ledger),
        "critical_chain": _chain(ledger),
        "clock": profile.manifest["clock"],
        "bytes_moved": profile.traffic.total_bytes,
        "bytes_by_stage": profile.traffic.by_stage,
        "bytes_by_workers": {f"{a}->{b}": n for (a, b), n in profile.traffic.by_workers.items()},
        "peak_bytes": profile.live.peak_bytes,
        "peak_bytes_by_data": profile.live.peak_by_data,
        "bytes_read": _bytes_read(profile),
        "compute_by_step": profile.work["compute_seconds"].to_dict(),
        "imbalance_by_step": imbalance.to_dict(orient="index"),
        "counters": {
            f"{row.step}.{row.counter}": row.value
            for row in profile.counters_by_step.itertuples()
            if not str(row.counter).startswith("checksum:")
        },
        "rehearsal": None if (trust := trust_of(profile)) is None else trust.as_json(),
        "digest": profile.manifest["digest"],
        "barriers": profile.manifest["barriers"],
        "attempts": attempts_of(profile),
        "resumed_from_cycle": resumed_from(profile),
        "status": profile.manifest["status"],
        "message": profile.manifest["message"],
    }
    return {key: _without_nan(value) for key, value in figures.items()}


def _bytes_read(profile: Profile) -> dict[str, Any]:
    """Logical bytes: what steps read across tile faces, and of that from tiles of other workers."""
    demand = profile.demand
    across = demand[demand["from_worker"] != demand["to_worker"]]
    by_stage = {str(stage): int(count) for stage, count in demand.groupby("stage")["bytes"].sum().items()}
    return {
        "across_faces": int(demand["bytes"].sum()),
        "across_workers": int(across["bytes"].sum()),
        "by_stage": by_stage,
    }


def _efficiency(ledger: Ledger) -> dict[str, float]:
    """The published factors, and the whole numbers that they are made of."""
    names = ("load_balance", "serialisation", "transfer", "communication", "parallel")
    return {**vars(ledger.factors), **{name: getattr(ledger.factors, name) for name in names}}


def _chain(ledger: Ledger) -> dict[str, Any]:
    """The critical chain's sums [s]; together they are the run's time."""
    accounts = {account: ns * 1e-9 for account, ns in ledger.chain.accounts_ns.items()}
    by_step = (ledger.chain.by_step * 1e-9).to_dict(orient="index")
    return {"tasks": len(ledger.chain.tasks), "core_seconds": accounts, "by_step": by_step}


def attempts_of(profile: Profile) -> int:
    """How many times the run was started; the record is of the last one."""
    return int(profile.manifest["notes"].get("attempts", 1))


def resumed_from(profile: Profile) -> int | None:
    """First cycle of the record, where that is not the run's first: it went on from the checkpoint before."""
    cycle = profile.manifest["notes"].get("resumed_from_cycle")
    return None if cycle is None else int(cycle)


def _without_nan(value: Any) -> Any:
    """The same with None in place of numbers that JSON cannot hold."""
    if isinstance(value, dict):
        return {key: _without_nan(inner) for key, inner in value.items()}
    return None if isinstance(value, float) and not math.isfinite(value) else value


def compute_by(profile: Profile, column: str) -> pd.Series[int]:
    """Time inside kernels [ns] by ``worker`` or ``tile``, every worker or tile that ran a task among them."""
    tasks = profile.tasks.set_index("task")[column]
    kernels = profile.intervals[profile.intervals["what"] == "kernel"]
    spent = (kernels["end_ns"] - kernels["start_ns"]).groupby(kernels["task"]).sum()
    return spent.reindex(tasks.index, fill_value=0).groupby(tasks).sum()


def first_difference(reference: Profile, other: Profile) -> Difference | None:
    """The first field and tile whose final bits differ."""
    ours, theirs = reference.manifest["digests"], other.manifest["digests"]
    for field in ours:
        for tile, (a, b) in enumerate(zip(ours[field], theirs.get(field, []), strict=False)):
            if a != b:
                return Difference(field, tile)
    if ours != theirs:
        return Difference(", ".join(sorted(set(ours) ^ set(theirs))) or "?", -1)
    return None


def first_traced_difference(reference: Profile, other: Profile) -> Difference | None:
    """The first task in program order whose traced checksums differ; both runs must have been traced."""
    ours, theirs = _trace(reference), _trace(other)
    for key, (checksum, field, step) in ours.items():
        if key not in theirs or theirs[key][0] != checksum:
            cycle, _, _, tile, _ = key
            return Difference(field, tile, step, cycle)
    return None


def _trace(profile: Profile) -> dict[tuple[int, str, int, int, str], tuple[int, str, str]]:
    tasks = profile.tasks.set_index("task")[["cycle", "stage", "iteration", "tile"]]
    marks = profile.counters[profile.counters["counter"].astype(str).str.startswith("checksum:")]
    joined = marks.join(tasks, on="task").sort_values("task")
    columns = ("cycle", "stage", "iteration", "tile", "counter", "value", "step")
    trace = {}
    for cycle, stage, iteration, tile, counter, value, step in zip(*(joined[c].tolist() for c in columns), strict=True):
        name = str(counter).removeprefix("checksum:")
        trace[cycle, str(stage), iteration, tile, name] = (int(value), name, str(step))
    return trace
