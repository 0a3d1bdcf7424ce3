"""How far a rehearsal can be trusted: what the engine added to waits that records asked for.

A rehearsed code's own times are stretched by the dilation; what dispatch, bytes and late wake-ups take is not. So
their share says how far the rehearsal is from the code, and by how much to stretch for it to become small.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import pandas as pd

from breakstep.profile.run import Profile
from breakstep.report.wording import in_mode, seconds

SMALL = 0.03  # chosen: what barriers cost is of interest from about 5 %, and this must stay clearly below


@dataclass(frozen=True)
class Trust:
    """The account of one rehearsal.

    Attributes
    ----------
    dilate : float
        Factor by which waits were stretched.
    engine, transfer, oversleep : float
        Shares of all core-seconds: the dispatch; bytes and ghost zones; waits beyond what was asked.
    median_oversleep_ns, late_oversleep_ns : int
        By how much a wait was longer than asked, in the middle and in one of a hundred [ns].
    bound_ns : int
        What the records alone require: in lockstep the sum over phases of the busiest worker's waits, else the
        busiest worker's waits in all [ns].
    span_ns : int
        How long the run took [ns].
    """

    dilate: float
    engine: float
    transfer: float
    oversleep: float
    median_oversleep_ns: int
    late_oversleep_ns: int
    bound_ns: int
    span_ns: int

    @property
    def overhead(self) -> float:
        """Share of all that is not the code's."""
        return min(self.engine + self.transfer + self.oversleep, 1.0)

    @property
    def enough(self) -> float:
        """Dilation from which the overhead is small, if it does not grow with the waits."""
        if self.overhead <= SMALL:
            return self.dilate
        if self.overhead >= 1.0:
            return math.inf
        return self.dilate * self.overhead / (1.0 - self.overhead) * (1.0 - SMALL) / SMALL

    def as_json(self) -> dict[str, Any]:
        """The figures under the documented keys; null for a dilation that cannot be told."""
        enough = self.enough if math.isfinite(self.enough) else None
        return {**asdict(self), "overhead": self.overhead, "small": SMALL, "dilate_at_least": enough}


def trust_of(profile: Profile) -> Trust | None:
    """The account of a run with steps by timer; None for one without."""
    waits = _waits(profile)
    if waits is None or not len(waits):
        return None
    late = (waits["end_ns"] - waits["start_ns"] - waits["cpu_ns"]).clip(lower=0).to_numpy()
    available = max(profile.ledger.available_ns, 1)
    accounts = profile.ledger.accounts_ns
    manifest: Any = profile.manifest
    return Trust(
        dilate=float(manifest.get("dilate", 1.0)),
        engine=accounts["engine"] / available,
        transfer=accounts["transfer"] / available,
        oversleep=int(late.sum()) / available,
        median_oversleep_ns=int(np.median(late)),
        late_oversleep_ns=int(np.quantile(late, 0.99)),
        bound_ns=_bound(profile, waits),
        span_ns=profile.ledger.span_ns,
    )


def _waits(profile: Profile) -> pd.DataFrame | None:
    """Kernel intervals of steps by timer, with the place and phase of their tasks."""
    if not profile.timed_steps:
        return None
    intervals = profile.intervals
    chosen = intervals[(intervals["what"] == "kernel") & intervals["step"].isin(list(profile.timed_steps))]
    return chosen.merge(profile.tasks[["task", "stage", "cycle", "iteration", "worker"]], on="task")


def _bound(profile: Profile, waits: pd.DataFrame) -> int:
    """Shortest span that the waits allow on these workers."""
    by = ["stage", "cycle", "iteration", "worker"] if profile.manifest["mode"] == "lockstep" else ["worker"]
    sums = waits.groupby(by, observed=True)["cpu_ns"].sum()
    longest = sums.groupby(by[:-1], observed=True).max().sum() if by[:-1] else sums.max()
    threads = max(1, profile.manifest["threads"] // max(1, profile.manifest["workers"]))
    return int(longest) // threads


def trust_sentences(profiles: Sequence[Profile]) -> list[str]:
    """What to think of rehearsals, the worst of them deciding; nothing for runs of real steps."""
    found = [(profile, trust) for profile in profiles if (trust := trust_of(profile)) is not None]
    if not found:
        return []
    worst = max((trust for _, trust in found), key=lambda trust: trust.overhead)
    spans = " and ".join(f"{t.span_ns / max(t.bound_ns, 1):.2f} times {in_mode(p)}" for p, t in found)
    return [
        f"Rehearsal at dilation {worst.dilate:g}: up to {_percent(worst.overhead)} of the time is not the code's"
        f" (dispatch {_percent(worst.engine)}, bytes {_percent(worst.transfer)}, overslept {_percent(worst.oversleep)};"
        f" waits are {seconds(worst.median_oversleep_ns * 1e-9)} late, one in a hundred"
        f" {seconds(worst.late_oversleep_ns * 1e-9)}). The span is {spans} what the records alone require."
        f" {_advice(worst)}"
    ]


def _percent(part: float) -> str:
    return f"{100.0 * part:.1f} %"


def _advice(worst: Trust) -> str:
    if worst.overhead <= SMALL:
        return f"Below {100 * SMALL:.0f} %: conclusions about barriers stand."
    if not math.isfinite(worst.enough):
        return "Nothing follows about barriers: dilate more."
    return (
        f"Dilate by at least {_rounded_up(worst.enough)} to bring that below {100 * SMALL:.0f} % before drawing"
        " conclusions about barriers."
    )


def _rounded_up(value: float) -> str:
    """With two digits, never less than it was."""
    unit = 10.0 ** (math.floor(math.log10(value)) - 1)
    return f"{math.ceil(value / unit - 1e-9) * unit:.3g}"
