"""Why the two ways of running differ, or do not: sentences, each with the figures it rests on.

What is said follows from the recorded accounts alone; a cause that took little is not mentioned. Sentences
come with a weight, the share of core-seconds that they speak of, so that a short text can keep the heaviest.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

from breakstep.profile.run import Profile
from breakstep.report.comparison import compute_by
from breakstep.report.wording import in_mode, listed, unevenness

NOTABLE_SHARE = 0.02  # a cause below 2 % of the core-seconds is not worth a line
UNEVEN = 1.1  # busiest over mean below which work counts as even: barriers then stretch it by 10 % at most
MUCH_STOLEN = 0.08  # chosen: what is stolen then outweighs a gain that three pairs could resolve
MUCH_ENGINE = 0.1  # above this the dispatch hides what the comparison is about

Reason = tuple[float, str]


def reasons(lockstep: Profile, tasked: Profile) -> list[str]:
    """Sentences about a pair of runs: first what the barriers cost, then the rest by weight."""
    if lockstep.ledger.threads == 1:
        return ["On one thread nothing can wait for anything: use more workers to see what barriers cost."]
    prompt = 0 in tasked.manifest["notes"].get("lags", {}).values()
    first = list(_reduction_reason(tasked)) if prompt else []  # barriers by another name come next to barriers
    others = [
        *_stolen_reason(lockstep, tasked),
        *([] if prompt else _reduction_reason(tasked)),
        *_neighbour_reason(tasked),
        *_placement_reason(tasked),
        *([] if tasked.timed_steps else _engine_reason(tasked)),  # of a rehearsal more is said elsewhere
    ]
    heaviest_first = [sentence for _, sentence in sorted(others, key=lambda reason: -reason[0])]
    return [*_barrier_reason(lockstep), *(sentence for _, sentence in first), *heaviest_first]


def share(profile: Profile, account: str) -> float:
    """Part of all core-seconds in an account."""
    return profile.ledger.accounts_ns[account] / max(profile.ledger.available_ns, 1)


def _percent(part: float) -> str:
    return f"{100 * part:.0f} %" if part >= NOTABLE_SHARE else f"{100 * part:.1f} %"


def _most_at_fault(profile: Profile, account: str) -> str:
    """The step that most of an account's waits are for; a stage of several counts for its costliest."""
    waits = profile.ledger.waits_by_stage[account]
    return str(waits.groupby([_costliest(profile, str(stage)) for stage in waits.index]).sum().idxmax())


def _costliest(profile: Profile, stage: str) -> str:
    """The step of a stage that computes longest."""
    costs = profile.work["compute_ns"]
    return max(stage.split("+"), key=lambda name: int(costs[name]) if name in costs.index else 0)


def _barrier_reason(lockstep: Profile) -> Iterator[str]:
    if not lockstep.manifest["barriers"]:
        return
    part, where = share(lockstep, "barrier"), in_mode(lockstep)
    if part < NOTABLE_SHARE:
        yield f"Why: {where} cores waited at barriers for only {_percent(part)} of their time{_instead(lockstep)}."
        return
    step = _most_at_fault(lockstep, "barrier")
    yield (
        f"Why: {where} cores waited at barriers for {_percent(part)} of their time, mostly for"
        f" {step}{_unevenness_of(lockstep, step)}."
    )


def _instead(lockstep: Profile) -> str:
    """Why barriers cost little: even phases, or a reduction that makes cores wait before the barrier does."""
    reduction = share(lockstep, "reduction")
    if reduction >= NOTABLE_SHARE:
        return f", and for reductions, which hold tasks back as well, for {_percent(reduction)}"
    work = lockstep.work["compute_ns"]
    if len(work) and float(lockstep.imbalance["phases_weighted"].get(str(work.idxmax()), math.inf)) < UNEVEN:
        return "; the phases are even"
    return ""


def _unevenness_of(lockstep: Profile, step: str) -> str:
    if step not in lockstep.imbalance.index:
        return ""
    phases, tiles = (float(lockstep.imbalance[column][step]) for column in ("phases_weighted", "tiles"))
    if not math.isfinite(phases) or phases < UNEVEN:
        return ""
    tile = f", the busiest tile {unevenness(tiles)} times the mean tile's" if math.isfinite(tiles) else ""
    return f" (the busiest worker of a phase has {unevenness(phases)} times the mean work{tile})"


def _without_processor(profile: Profile) -> int:
    """Kernel time of real steps beyond their processor time [ns]; steps by timer need no processor."""
    work = profile.work.drop(index=list(profile.timed_steps), errors="ignore")
    return int((work["compute_ns"] - work["cpu_ns"]).sum())


def _stolen_reason(lockstep: Profile, tasked: Profile) -> Iterator[Reason]:
    """Kernel time in which the processor was somebody else's: what is measured then is the machine's other work."""
    wall = sum(int(p.work["compute_ns"].sum()) for p in (lockstep, tasked))
    stolen = sum(_without_processor(p) for p in (lockstep, tasked)) / wall if wall else 0.0
    if stolen >= MUCH_STOLEN:
        yield (
            1.0,
            f"Kernels had no processor for {_percent(stolen)} of their time: they shared it with other programs or"
            " with more threads than there are cores, or they waited. Make sure before drawing conclusions.",
        )


def _reduction_reason(tasked: Profile) -> Iterator[Reason]:
    part = share(tasked, "reduction")
    if part < NOTABLE_SHARE:
        return
    step = _most_at_fault(tasked, "reduction")
    sentence = f"Without barriers, {_percent(part)} still goes to waiting for reductions, mostly behind {step}."
    lags: dict[str, int] = tasked.manifest["notes"].get("lags", {})
    prompt = [name for name, lag in lags.items() if lag == 0]
    if prompt:
        sentence += (
            f" With lag 0, {listed(prompt)} {'makes' if len(prompt) == 1 else 'make'} every tile wait for the"
            " slowest one; lag 1 would let tiles run ahead, at a price."
        )
    yield part, sentence


def _neighbour_reason(tasked: Profile) -> Iterator[Reason]:
    part = share(tasked, "neighbour")
    if part >= NOTABLE_SHARE:
        step = _most_at_fault(tasked, "neighbour")
        yield part, f"Without barriers, {_percent(part)} goes to waiting for neighbour tiles, mostly for {step}."


def _placement_reason(tasked: Profile) -> Iterator[Reason]:
    """Work that is uneven over the whole run: no order of tasks helps; other owners may, if tiles are small enough."""
    workers = tasked.manifest["workers"]
    by_worker = compute_by(tasked, "worker")
    total = int(by_worker.sum())
    if workers < 2 or not total:
        return
    mean, busiest = total / workers, int(by_worker.max())
    if busiest < UNEVEN * mean:
        return
    tile = int(compute_by(tasked, "tile").max())
    cure = (
        "its busiest tile alone has more than that mean, which smaller tiles cure, and no order of tasks does"
        if tile > mean
        else "unevenness that stays in place is cured by placement, not by tasks"
    )
    idle = sum(share(tasked, account) for account in ("neighbour", "reduction", "unemployed"))
    yield (
        min(1.0 - mean / busiest, idle),
        f"Over the whole run one worker has {busiest / mean:.2f} times the mean work: {cure}.",
    )


def _engine_reason(tasked: Profile) -> Iterator[Reason]:
    part = share(tasked, "engine")
    steps = tasked.tasks[tasked.tasks["kind"] == "step"]
    if part < NOTABLE_SHARE or not len(steps):
        return
    mean = float((steps["end_ns"] - steps["start_ns"]).mean()) / 1e6
    verdict = " Use larger tiles before drawing conclusions about barriers." if part > MUCH_ENGINE else ""
    yield (
        part,
        f"The dispatch itself takes {_percent(part)} of the time; a step task lasts {mean:.2g} ms on average.{verdict}",
    )
