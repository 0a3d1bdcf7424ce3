"""The accounts as tables: core-seconds, steps, unevenness, efficiency factors."""

from __future__ import annotations

from dataclasses import fields, is_dataclass
from typing import Any

from breakstep.profile.ledger import ACCOUNTS
from breakstep.profile.run import Profile
from breakstep.report.page.numbers import seconds, share, significant
from breakstep.report.page.runs import Runs
from breakstep.report.page.waits import WORDS, blame


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
        "words": {account: WORDS.get(account, account) for account in ACCOUNTS},
        "share": {account: share(ledger.accounts_ns[account], ledger.available_ns) for account in ACCOUNTS},
        "closure_error": ledger.closure_error,
        "steps": _steps(profile),
        "waits_for": {account: blame(profile, account) for account in ("neighbour", "reduction", "barrier")},
        "factors": _factors(profile),
        "counters": [
            {"step": str(row.step), "counter": str(row.counter), "value": int(row.value)}
            for row in profile.counters_by_step.itertuples()
            if not str(row.counter).startswith("checksum:")
        ],
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


def _factors(profile: Profile) -> dict[str, float | None]:
    """The published efficiency factors, where the profile knows them."""
    factors = getattr(profile, "factors", None)
    if factors is None or not is_dataclass(factors):
        return {}
    numbers = {one.name: getattr(factors, one.name) for one in fields(factors)}
    return {name: significant(value) for name, value in numbers.items() if isinstance(value, float)}
