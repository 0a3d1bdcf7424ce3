"""Core-second columns: one run's time in parts that add up to threads times span, steps of physics first."""

from __future__ import annotations

from typing import Any

import numpy as np

from breakstep.profile.frames import sums_by
from breakstep.profile.inside import inside_tasks
from breakstep.profile.run import Profile
from breakstep.profile.words import LABELS
from breakstep.report.page.numbers import seconds, share
from breakstep.report.page.runs import Runs
from breakstep.report.page.waits import COMPUTE, account_order

#: Steps with a part of their own: more would need more colours than can be told apart by everybody.
MOST_STEPS = 6
OTHER_STEPS = "other steps"


def columns_panel(runs: Runs) -> dict[str, Any]:
    """Parts of each run's core-seconds, the same parts in the same order for both.

    Returns
    -------
    dict
        ``parts``: for each its ``name``, ``kind`` (step, machine or wait), and core-seconds and share of each
        run; ``total``: core-seconds of each run; ``handed_back``: the difference, of a pair.
    """
    steps = _steps(runs)
    names = [(step, "step") for step in steps] + [(account, _kind(account)) for account in account_order(runs)]
    amounts = {side: _amounts(profile, steps) for side, profile in runs.sides.items()}
    total = {side: profile.ledger.available_ns for side, profile in runs.sides.items()}
    parts = [
        {
            "name": name,
            "words": LABELS.get(name, name),
            "kind": kind,
            "core_s": {side: seconds(found[name]) for side, found in amounts.items()},
            "share": {side: share(found[name], total[side]) for side, found in amounts.items()},
        }
        for name, kind in names
        if any(found[name] for found in amounts.values())
    ]
    panel: dict[str, Any] = {"parts": parts, "total_core_s": {side: seconds(ns) for side, ns in total.items()}}
    if len(total) == 2:
        panel["handed_back_core_s"] = seconds(total["lockstep"] - total["tasked"])
    return panel


def _kind(account: str) -> str:
    return "machine" if account in ("engine", "stolen") else "wait"


def _steps(runs: Runs) -> list[str]:
    """The costliest steps in the order of cost, and what the others are called together."""
    cost = runs.either.work["compute_ns"].sort_values(ascending=False, kind="stable")
    names = [str(step) for step in cost.index]
    if len(names) <= MOST_STEPS + 1:
        return names
    return [*names[:MOST_STEPS], OTHER_STEPS]


def _amounts(profile: Profile, steps: list[str]) -> dict[str, int]:
    """Nanoseconds of each part; a step gets its time in kernels on a processor, which is what compute is made of."""
    accounts = dict(profile.ledger.accounts_ns)
    compute, own = accounts.pop(COMPUTE), _on_processor(profile)
    amounts = {step: own.get(step, 0) for step in steps if step != OTHER_STEPS}
    if OTHER_STEPS in steps:
        amounts[OTHER_STEPS] = compute - sum(amounts.values())
    return {**amounts, **accounts}


def _on_processor(profile: Profile) -> dict[str, int]:
    """Time in each step's kernels on a processor [ns]."""
    inside = inside_tasks(profile.frames, profile.timed_steps)
    own = np.where(inside.kernel, inside.end - inside.start - inside.stolen, 0)
    sums = sums_by(inside.step, own, len(inside.steps))
    return dict(zip(inside.steps, (int(ns) for ns in sums), strict=True))
