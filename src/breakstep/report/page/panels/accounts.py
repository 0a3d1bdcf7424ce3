"""The accounts as tables: core-seconds, steps, unevenness, efficiency factors."""

from __future__ import annotations

from typing import Any

from breakstep.profile.ledger import ACCOUNTS
from breakstep.profile.run import Profile
from breakstep.profile.words import LABELS
from breakstep.report.page.numbers import seconds, share, significant
from breakstep.report.page.runs import Runs
from breakstep.report.page.waits import blame, costliest

#: What each efficiency factor means, 1 being perfect.
FACTORS = {
    "load balance": "mean thread\u2019s time in kernels over the busiest thread\u2019s",
    "serialisation": "what is left after tasks wait for each other: 1 if the busiest thread never waits",
    "transfer": "what is left after bytes and dispatch: 1 if both take no time",
    "parallel efficiency": "time in kernels over threads \u00d7 time: the product of the three",
}


def accounts_panel(runs: Runs) -> dict[str, Any]:
    """For each run ``accounts``, ``steps``, ``waits_for``, ``factors``; whole nanoseconds where the ledger has them."""
    return {side: _of(profile) for side, profile in runs.sides.items()}


def _of(profile: Profile) -> dict[str, Any]:
    ledger = profile.ledger
    return {
        "span_ns": ledger.span_ns,
        "threads": ledger.threads,
        "available_ns": ledger.available_ns,
        "accounts_ns": {account: ledger.accounts_ns[account] for account in ACCOUNTS},
        "words": {account: LABELS.get(account, account) for account in ACCOUNTS},
        "share": {account: share(ledger.accounts_ns[account], ledger.available_ns) for account in ACCOUNTS},
        "closure_error": ledger.closure_error,
        "steps": _steps(profile),
        "waits_for": {account: blame(profile, account) for account in ("neighbour", "reduction", "barrier")},
        "factors": _factors(profile),
        "critical": _critical(profile),
        "counters": _counters(profile),
    }


def _steps(profile: Profile) -> list[dict[str, Any]]:
    uneven = profile.imbalance
    rows = []
    for step, row in profile.work.sort_values("compute_ns", ascending=False, kind="stable").iterrows():
        found = {column: float(uneven[column].get(str(step), float("nan"))) for column in uneven.columns}
        rows.append(
            {
                "step": str(step),
                "kernels": int(row["kernels"]),
                "wall_s": seconds(row["compute_ns"]),
                "cpu_s": seconds(row["cpu_ns"]),
                "busiest_over_mean": {column: significant(value) for column, value in found.items()},
            }
        )
    return rows


def _counters(profile: Profile) -> list[dict[str, Any]]:
    table = profile.counters_by_step
    rows = zip(table["step"], table["counter"], table["value"], strict=True)
    return [
        {"step": str(step), "counter": str(counter), "value": int(value)}
        for step, counter, value in rows
        if not str(counter).startswith("checksum:")
    ]


def _factors(profile: Profile) -> dict[str, float | None]:
    """The published efficiency factors; parallel efficiency is the product of the first three."""
    factors = profile.ledger.factors
    return {
        "load balance": significant(factors.load_balance),
        "serialisation": significant(factors.serialisation),
        "transfer": significant(factors.transfer),
        "parallel efficiency": significant(factors.parallel),
    }


def _critical(profile: Profile) -> dict[str, Any]:
    """The chain of tasks that made the run as long as it was: its time by account, and by step [ns]."""
    chain = profile.ledger.chain
    by_step: dict[str, int] = {}
    for stage, ns in chain.by_step.sum(axis=1).items():
        step = "barriers" if str(stage).startswith("barrier:") else costliest(profile, str(stage))
        by_step[step] = by_step.get(step, 0) + int(ns)
    return {"span_ns": chain.span_ns, "accounts_ns": dict(chain.accounts_ns), "by_step_ns": by_step}
