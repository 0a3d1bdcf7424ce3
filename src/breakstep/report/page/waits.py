"""What the accounts are called on the page, in which order, and which step waits are for."""

from __future__ import annotations

from breakstep.profile.causes import WAITS
from breakstep.profile.ledger import ACCOUNTS
from breakstep.profile.run import Profile
from breakstep.report.page.runs import Runs

COMPUTE = "compute"
#: Below the physics what the machine takes, then what tasks leave of waiting, then what barriers make of it.
_ORDER = ("stolen", "engine", "transfer", "neighbour", "reduction", "unemployed", "barrier")
#: Idle time by account, as part of a sentence.
PHRASES = {
    "neighbour": "waiting for a neighbour tile",
    "reduction": "waiting for a reduction",
    "barrier": "waiting at a barrier",
    "unemployed": "after a thread's last task",
}
IDLE_ACCOUNTS = ("neighbour", "reduction", "barrier", "unemployed")


def account_order(runs: Runs) -> list[str]:
    """All accounts but compute, as the columns stack them from below."""
    known = [account for account in _ORDER if account in ACCOUNTS]
    others = [account for account in ACCOUNTS if account not in _ORDER and account != COMPUTE]
    return [*others, *known]


def idle_ns(profile: Profile) -> int:
    """Time in which threads stood idle, all together [ns]."""
    return sum(profile.ledger.accounts_ns[account] for account in IDLE_ACCOUNTS)


def idle_share(profile: Profile) -> float:
    """Part of all core-seconds in which cores stood idle."""
    return idle_ns(profile) / max(profile.ledger.available_ns, 1)


def costliest(profile: Profile, stage: str) -> str:
    """The step of a stage that computes longest; what is said of a barrier is said of the stage before it."""
    stage = stage.removeprefix("barrier:")
    cost = profile.work["compute_ns"]
    return max(stage.split("+"), key=lambda name: int(cost[name]) if name in cost.index else 0)


def blame(profile: Profile, account: str) -> dict[str, int]:
    """Nanoseconds of an account's waits by the step they are for, the largest first."""
    by_step: dict[str, int] = {}
    if account not in WAITS:
        return by_step
    for stage, ns in profile.ledger.waits_by_stage[account].items():
        step = costliest(profile, str(stage))
        by_step[step] = by_step.get(step, 0) + int(ns)
    return dict(sorted(by_step.items(), key=lambda item: -item[1]))
