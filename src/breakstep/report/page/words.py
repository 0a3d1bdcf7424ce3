"""The page in words: five questions in the order in which people ask them, each answered from the numbers shown.

A reader who stops after these knows which physics makes cores stand idle, how much leaving lockstep hands back,
and what still ties the tiles together.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from breakstep.profile.run import Profile
from breakstep.profile.words import LABELS
from breakstep.report.page.first import caution, first
from breakstep.report.page.formats import digits
from breakstep.report.page.grain import larger_is_better
from breakstep.report.page.runs import Runs
from breakstep.report.page.spots import HotSpot, hot_spot
from breakstep.report.page.waits import IDLE_ACCOUNTS, PHRASES, blame, idle_ns, idle_share
from breakstep.report.reasons import NOTABLE_SHARE, UNEVEN, share
from breakstep.report.wording import in_mode, listed, ratio, seconds

#: Steps are named as causes of waits where they cause more than this part of them.
WORTH_NAMING = 0.05
_TIES = {
    "neighbour": "neighbour tiles that are not done yet",
    "reduction": "reductions, values made from all tiles",
}
_BESIDES = {
    "engine": "dispatch",
    "stolen": "kernels without a processor",
    "transfer": "moving bytes and putting ghost zones together",
}


def answers(runs: Runs, data: dict[str, Any]) -> list[dict[str, str]]:
    """Question and answer, in order; questions that the runs cannot answer are left out."""
    found = [
        ("What would leaving lockstep buy?", _bought(runs, data)),
        ("Why do cores stand idle in lockstep?", _why(runs.lockstep) if runs.lockstep else ""),
        ("Where?", _where(runs, data["forecast"])),
        ("What still ties the tiles together without barriers?", _ties(runs)),
        ("Was the machine quiet enough?", caution(runs)),
        ("What to do first?", first(runs, data["forecast"])),
    ]
    return [{"question": question, "answer": answer} for question, answer in found if answer]


def percent(part: float) -> str:
    """A part of all core-seconds: whole percents, and tenths below ten."""
    return f"{100 * part:.0f} %" if part >= 0.095 else f"{100 * part:.1f} %"


def _bought(runs: Runs, data: dict[str, Any]) -> str:
    if runs.comparison is None or runs.lockstep is None or runs.tasked is None:
        return "Only one way of running was recorded; a run of the other way would tell."
    left, right = runs.lockstep.ledger, runs.tasked.ledger
    gain = runs.comparison.gain
    spans = f"{seconds(left.span_ns / 1e9)} {in_mode(runs.lockstep)}, {seconds(right.span_ns / 1e9)} tasked"
    whole, handed = left.available_ns * 1e-9, (left.available_ns - right.available_ns) * 1e-9
    saved = seconds(abs(left.span_ns - right.span_ns) / 1e9)
    change = (
        f"{digits(handed)} of {digits(whole)} core-seconds handed back (lockstep less tasked; {saved} of wall time)"
        if handed >= 0
        else f"{digits(-handed)} core-seconds more than lockstep's {digits(whole)}"
    )
    evidence = _evidence(gain.median, gain.low, gain.high, len(gain.ratios))
    against = _against(runs.lockstep, runs.tasked)
    return f"{spans} on {left.threads} threads: {change}. {evidence}{against}"


def _against(lockstep: Profile, tasked: Profile) -> str:
    """What takes back of the waiting that is saved, where it takes back half of it or more."""
    grown = {account: ns - lockstep.ledger.accounts_ns[account] for account, ns in tasked.ledger.accounts_ns.items()}
    saved = -sum(grown[account] for account in IDLE_ACCOUNTS)
    worst = max((account for account in grown if account not in IDLE_ACCOUNTS), key=lambda account: grown[account])
    if saved <= 0 or grown[worst] < saved / 2:
        return ""
    return (
        f" Idle time falls by {digits(saved * 1e-9)} core-seconds, but {LABELS[worst]} grows by"
        f" {digits(grown[worst] * 1e-9)}."
    )


def _evidence(median: float, low: float | None, high: float | None, pairs: int) -> str:
    if low is None or high is None:
        return f"The gain of this one pair is {ratio(median)}; one pair has no interval, so it may be chance."
    verdict = (
        "The interval excludes 1, so it is more than noise."
        if low > 1.0 or high < 1.0
        else "The interval includes 1: these pairs cannot tell it from none."
    )
    return f"Gain {ratio(median)}, the median of {pairs} pairs, 95 % interval {ratio(low)} to {ratio(high)}. {verdict}"


def _why(lockstep: Profile) -> str:
    if lockstep.ledger.threads == 1:
        return "One thread waits for nobody; more workers would show what barriers cost."
    causes = _shares(_idle_by_step(lockstep), idle_ns(lockstep))
    blamed = f"Of all idle core-seconds in lockstep, these steps are waited for: {listed(causes)}. " if causes else ""
    kinds = sorted(IDLE_ACCOUNTS, key=lambda a: -share(lockstep, a))
    parts = [
        f"{percent(share(lockstep, account))} {PHRASES[account]}"
        for account in kinds
        if share(lockstep, account) >= NOTABLE_SHARE
    ]
    spent = f": {listed(parts)}" if parts else ""
    text = (
        f"{blamed}For {percent(idle_share(lockstep))} of their time {in_mode(lockstep)} cores have nothing to"
        f" run{spent}."
    )
    charged = "A wait is charged to the step at the root of its chain of causes." if causes else ""
    return " ".join(part for part in [text, charged, *_unevenness(lockstep)] if part)


def _idle_by_step(profile: Profile) -> dict[str, int]:
    """Idle nanoseconds of all kinds by the step that they are for, the largest first."""
    by_step: dict[str, int] = {}
    for account in IDLE_ACCOUNTS:
        for step, ns in blame(profile, account).items():
            by_step[step] = by_step.get(step, 0) + ns
    return dict(sorted(by_step.items(), key=lambda item: -item[1]))


def _shares(by_step: dict[str, int], whole: int) -> list[str]:
    """Steps with their part of a whole, those that are worth a word: ``burn 41 %``."""
    return [f"{step} {percent(ns / whole)}" for step, ns in by_step.items() if ns > WORTH_NAMING * whole]


def _unevenness(lockstep: Profile) -> list[str]:
    """How uneven the step is that most waiting at barriers is for."""
    steps = list(blame(lockstep, "barrier"))
    if not steps or steps[0] not in lockstep.imbalance.index or share(lockstep, "barrier") < NOTABLE_SHARE:
        return []
    workers, tiles = (float(lockstep.imbalance[column][steps[0]]) for column in ("phases_weighted", "tiles"))
    if not np.isfinite(workers) or not np.isfinite(tiles):
        return []
    if workers < UNEVEN:
        return [f"Between barriers {steps[0]} is even to {100 * (workers - 1):.0f} %: small differences, often."]
    return [
        f"Between two barriers the busiest worker has {ratio(workers)} times the mean worker's {steps[0]}, since the"
        f" busiest tile has {ratio(tiles)} times the mean tile's."
    ]


def _where(runs: Runs, forecast: Mapping[str, Any]) -> str:
    spot = hot_spot(runs.either)
    remedy = "placement" if larger_is_better(forecast) else "placement or smaller tiles"
    return "" if spot is None else _spot_words(spot, remedy)


def _spot_words(spot: HotSpot, remedy: str) -> str:
    if spot.tiles_for_half > 0.35 * spot.tiles:
        return f"Nowhere in particular: {spot.step}, the most uneven step, is spread over most tiles."
    tiles = "tile" if len(spot.named) == 1 else "tiles"
    text = (
        f"{spot.step} is concentrated: {spot.tiles_for_half} of {spot.tiles} tiles make half of its cost, first of all"
        f" {tiles} {listed(spot.named)}."
    )
    if spot.stays >= 0.8:
        return text + f" They stay the costliest throughout, so {remedy} would help, not only tasks."
    return text + f" The costliest tile changes: it is the same in {100 * spot.stays:.0f} % of the cycles."


def _ties(runs: Runs) -> str:
    tasked = runs.tasked
    if tasked is None:
        return ""
    if tasked.ledger.threads == 1:
        return "Nothing: there is one thread."
    parts = [f"Tasked, cores still have nothing to run for {percent(idle_share(tasked))} of their time."]
    for account in sorted(_TIES, key=lambda a: -share(tasked, a)):
        part = share(tasked, account)
        if part >= NOTABLE_SHARE / 4:
            causes = _shares(blame(tasked, account), tasked.ledger.accounts_ns[account])
            of_it = f"; of that {listed(causes)}" if causes else ""
            parts.append(f"{percent(part)} waits for {_TIES[account]}{of_it}.")
    return " ".join([*parts, *_besides(tasked), *_lags(tasked), *_same_lags(runs)])


def _besides(tasked: Profile) -> list[str]:
    """The large accounts that are no waiting."""
    large = sorted((a for a in _BESIDES if share(tasked, a) >= NOTABLE_SHARE), key=lambda a: -share(tasked, a))
    if not large:
        return []
    named = listed([f"{_BESIDES[account]} {percent(share(tasked, account))}" for account in large])
    return [f"No waiting for tiles, but no physics either: {named}."]


def _same_lags(runs: Runs) -> list[str]:
    lags = [profile.manifest["notes"].get("lags", {}) for profile in runs.sides.values()]
    return ["Both runs use the same lags."] if len(lags) == 2 and lags[0] and lags[0] == lags[1] else []


def _lags(tasked: Profile) -> list[str]:
    lags: dict[str, int] = tasked.manifest["notes"].get("lags", {})
    prompt = [name for name, lag in lags.items() if lag == 0]
    late = [f"{name} (lag {lag})" for name, lag in lags.items() if lag > 0]
    found = []
    if prompt:
        verb = "is" if len(prompt) == 1 else "are"
        found.append(
            f"{listed(prompt)} {verb} used at once (lag 0), so every tile waits for the slowest: a barrier by another"
            " name."
        )
    if late:
        verb = "it is" if len(late) == 1 else "they are"
        found.append(f"The reductions {listed(late)} may be used late, so {verb} no barrier in disguise.")
    return found
