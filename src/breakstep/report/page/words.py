"""The page in words: five questions in the order in which people ask them, each answered from the numbers shown.

A reader who stops after these knows which physics makes cores stand idle, how much leaving lockstep hands back,
and what still ties the tiles together.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from breakstep.profile.run import Profile
from breakstep.profile.words import LABELS
from breakstep.report.page.formats import capital, digits
from breakstep.report.page.runs import Runs
from breakstep.report.page.spots import HotSpot, hot_spot
from breakstep.report.page.waits import IDLE_ACCOUNTS, PHRASES, blame, idle_share
from breakstep.report.reasons import MUCH_ENGINE, MUCH_STOLEN, NOTABLE_SHARE, UNEVEN, share
from breakstep.report.wording import in_mode, listed, ratio, seconds

#: Steps named as the ones at fault: so many of the largest as make up this part of the waits, two at most.
MOST_OF_IT = 0.7


def answers(runs: Runs, data: dict[str, Any]) -> list[dict[str, str]]:
    """Question and answer, in order; questions that the runs cannot answer are left out."""
    found = [
        ("What would leaving lockstep buy?", _bought(runs, data)),
        ("Why do cores stand idle in lockstep?", _why(runs.lockstep) if runs.lockstep else ""),
        ("Where?", _where(runs)),
        ("What still ties the tiles together without barriers?", _ties(runs.tasked) if runs.tasked else ""),
        ("What to do first?", _first(runs, data)),
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
    change = (
        f"{digits(handed)} of {digits(whole)} core-seconds handed back"
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


def _culprits(profile: Profile, account: str) -> str:
    """The steps that most of an account's waits are for: ``46 % of that for burn and 16 % for relax``."""
    waits = blame(profile, account)
    total = sum(waits.values())
    named: list[str] = []
    covered = 0
    for step, ns in list(waits.items())[:2]:
        if covered >= MOST_OF_IT * total or ns < 0.1 * total:
            break
        covered += ns
        named.append(f"{100 * ns / total:.0f} %{'' if named else ' of that'} for {step}")
    return listed(named)


def _why(lockstep: Profile) -> str:
    if lockstep.ledger.threads == 1:
        return "One thread waits for nobody; more workers would show what barriers cost."
    parts = [f"For {percent(idle_share(lockstep))} of their time {in_mode(lockstep)} cores have nothing to run."]
    for account in sorted(IDLE_ACCOUNTS, key=lambda a: -share(lockstep, a)):
        if share(lockstep, account) >= NOTABLE_SHARE:
            culprits = _culprits(lockstep, account)
            part = percent(share(lockstep, account))
            parts.append(f"{part} is {PHRASES[account]}{f', {culprits}' if culprits else ''}.")
    parts += _unevenness(lockstep)
    return " ".join(parts)


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


def _where(runs: Runs) -> str:
    spot = hot_spot(runs.either)
    return "" if spot is None else _spot_words(spot)


def _spot_words(spot: HotSpot) -> str:
    if spot.tiles_for_half > 0.35 * spot.tiles:
        return f"Nowhere in particular: {spot.step}, the most uneven step, is spread over most tiles."
    tiles = "tile" if len(spot.named) == 1 else "tiles"
    text = (
        f"{spot.step} is concentrated: {spot.tiles_for_half} of {spot.tiles} tiles make half of its cost, first of all"
        f" {tiles} {listed(spot.named)}."
    )
    if spot.stays >= 0.8:
        return text + " They stay the costliest throughout, so placement or smaller tiles would help, not only tasks."
    return text + f" The costliest tile changes: it is the same in {100 * spot.stays:.0f} % of the cycles."


def _ties(tasked: Profile) -> str:
    if tasked.ledger.threads == 1:
        return "Nothing: there is one thread."
    idle = idle_share(tasked)
    parts = [f"Tasked, cores still have nothing to run for {percent(idle)} of their time."]
    causes = {
        "neighbour": "neighbour tiles that are not done yet",
        "reduction": "reductions, values made from all tiles",
    }
    for account in sorted(causes, key=lambda a: -share(tasked, a)):
        part = share(tasked, account)
        if part >= NOTABLE_SHARE / 4:
            culprits = _culprits(tasked, account)
            parts.append(f"{percent(part)} waits for {causes[account]}{f', {culprits}' if culprits else ''}.")
    if share(tasked, "transfer") >= NOTABLE_SHARE:
        parts.append(
            f"A further {percent(share(tasked, 'transfer'))} goes to moving bytes and putting ghost zones together."
        )
    return " ".join([*parts, *_lags(tasked)])


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


def _first(runs: Runs, data: dict[str, Any]) -> str:
    """A caution where the machine was busy; then the forecast's first advice, or what the accounts suggest."""
    profile = runs.tasked or runs.either
    advice = data["forecast"].get("advice") or []
    found = _advice(advice[0]) if advice else _remedy(runs, profile)
    if share(profile, "stolen") <= MUCH_STOLEN:
        return found
    return (
        f"Measure again on a quiet machine: for {percent(share(profile, 'stolen'))} of the time kernels had no"
        f" processor, because something else had it. If the figures stay: {found[0].lower()}{found[1:]}"
    )


def _advice(best: dict[str, Any]) -> str:
    of = f" of {seconds(float(best['baseline_s']))}" if "baseline_s" in best else ""
    gain = seconds(float(best["gain_s"]))
    return f"{capital(str(best['do']))}: by forecast that hands back {gain}{of}. The list at the end has more."


def _remedy(runs: Runs, profile: Profile) -> str:
    engine = share(profile, "engine")
    if engine > MUCH_ENGINE:
        mean = _mean_ms(profile)
        return f"Use larger tiles: the dispatch takes {percent(engine)} of the time, with tasks of {mean:.2g} ms."
    if runs.lockstep is not None and share(runs.lockstep, "barrier") >= NOTABLE_SHARE:
        step = next(iter(blame(runs.lockstep, "barrier")), "")
        return f"Take out the barrier behind {step}: more waiting at barriers is for {step} than for any other step."
    if runs.lockstep is not None:
        return "Leave the barriers as they are: little is lost at them."
    step = next(iter(blame(profile, "neighbour")), "")
    if step and share(profile, "neighbour") >= NOTABLE_SHARE:
        return f"Spread {step} better, by placement or smaller tiles: most waiting for neighbour tiles is for {step}."
    return "Nothing stands out. A lockstep run beside this one would say what barriers cost."


def _mean_ms(profile: Profile) -> float:
    steps = profile.tasks[(profile.tasks["kind"] == "step").to_numpy()]
    return float((steps["end_ns"] - steps["start_ns"]).mean()) / 1e6 if len(steps) else 0.0
