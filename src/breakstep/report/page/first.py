"""What to do first: the forecast's first advice, or what the accounts suggest; and how far to trust either.

The summary and the list of advice take their first item from here, so they cannot disagree.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from breakstep.profile.run import Profile
from breakstep.report.page.formats import capital
from breakstep.report.page.grain import larger_is_better
from breakstep.report.page.runs import Runs
from breakstep.report.page.waits import blame
from breakstep.report.reasons import MUCH_ENGINE, MUCH_STOLEN, NOTABLE_SHARE, share
from breakstep.report.wording import seconds

#: How the advice names the one change that a pair of runs has made already.
_NO_BARRIERS = "run without barriers"


def marked(runs: Runs, advice: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """The advice, each with ``uncertain`` (its interval includes zero) and ``measured`` (in words, or nothing)."""
    return [
        {**one, "uncertain": float(one.get("low_s", one["gain_s"])) <= 0.0, "measured": _measured(runs, one)}
        for one in advice
    ]


def _measured(runs: Runs, one: Mapping[str, Any]) -> str:
    """What the pair that is shown gained by the very same change, on as many workers."""
    left, right = runs.lockstep, runs.tasked
    if left is None or right is None or one["do"] != _NO_BARRIERS:
        return ""
    asked_for = f"--workers {left.manifest['workers']} "
    same = left.manifest["mode"] == "lockstep" and right.manifest["mode"] == "tasked"
    if not same or asked_for not in f"{one.get('command', '')} ":
        return ""
    saved = (left.ledger.span_ns - right.ledger.span_ns) / 1e9
    change = f"{seconds(saved)} handed back" if saved >= 0 else f"{seconds(-saved)} more"
    return f"measured on this page: {change} of {seconds(left.ledger.span_ns / 1e9)}"


def caution(runs: Runs) -> str:
    """That the machine was busy, where it was."""
    stolen = share(runs.tasked or runs.either, "stolen")
    if stolen <= MUCH_STOLEN:
        return ""
    return (
        f"No: for {100 * stolen:.0f} % of the time kernels had no processor, because something else had it. Measure"
        " again on a quiet machine before acting on small gains."
    )


def first(runs: Runs, forecast: Mapping[str, Any]) -> str:
    """The first item of the list of advice; without a list, what the accounts suggest."""
    advice = forecast.get("advice") or []
    return _advice(advice[0]) if advice else _remedy(runs, runs.tasked or runs.either, forecast)


def _advice(best: Mapping[str, Any]) -> str:
    of = f" of {seconds(float(best['baseline_s']))}" if "baseline_s" in best else ""
    doubt = ", but it is not certain to gain" if best.get("uncertain") else ""
    measured = f"; {best['measured']}" if best.get("measured") else ""
    gain = seconds(float(best["gain_s"]))
    forecast = f"by forecast that hands back {gain}{of}{doubt}{measured}"
    return f"{capital(str(best['do']))}: {forecast}. The list at the end has more."


def _remedy(runs: Runs, profile: Profile, forecast: Mapping[str, Any]) -> str:
    engine = share(profile, "engine")
    if engine > MUCH_ENGINE:
        mean = _mean_ms(profile)
        return f"Use larger tiles: the dispatch takes {100 * engine:.0f} % of the time, with tasks of {mean:.2g} ms."
    if runs.lockstep is not None and share(runs.lockstep, "barrier") >= NOTABLE_SHARE:
        step = next(iter(blame(runs.lockstep, "barrier")), "")
        return f"Take out the barrier behind {step}: more waiting at barriers is for {step} than for any other step."
    if runs.lockstep is not None:
        return "Leave the barriers as they are: little is lost at them."
    step = next(iter(blame(profile, "neighbour")), "")
    if step and share(profile, "neighbour") >= NOTABLE_SHARE:
        how = "placement" if larger_is_better(forecast) else "placement or smaller tiles"
        return f"Spread {step} better, by {how}: most waiting for neighbour tiles is for {step}."
    return "Nothing stands out. A lockstep run beside this one would say what barriers cost."


def _mean_ms(profile: Profile) -> float:
    steps = profile.tasks[(profile.tasks["kind"] == "step").to_numpy()]
    return float((steps["end_ns"] - steps["start_ns"]).mean()) / 1e6 if len(steps) else 0.0
