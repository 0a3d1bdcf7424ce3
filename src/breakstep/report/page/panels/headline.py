"""The answer: what leaving lockstep would buy, with its interval, and whether both ways end in the same bits."""

from __future__ import annotations

import re
from typing import Any

from breakstep.profile.run import Profile
from breakstep.report.comparison import Comparison
from breakstep.report.page.numbers import seconds, significant
from breakstep.report.page.runs import Runs
from breakstep.report.page.waits import idle_share
from breakstep.report.terminal import describe_difference, headline
from breakstep.report.wording import in_mode
from breakstep.report.wording import seconds as seconds_words

#: What a headline on the terminal advises to type; the page says it elsewhere.
_ADVICE = re.compile(r"; (more --pairs|use --pairs).*$")


def headline_panel(runs: Runs) -> dict[str, Any]:
    """What stands at the top of the page."""
    either = runs.either
    scenario = either.manifest["scenario"]
    panel: dict[str, Any] = {
        "scenario": str(scenario.get("name", "")),
        "title": str(scenario.get("title", "")),
        "description": str(scenario.get("resolved", {}).get("description", "") or ""),
        "span_s": {side: seconds(profile.ledger.span_ns) for side, profile in runs.sides.items()},
        "core_s": {side: seconds(profile.ledger.available_ns) for side, profile in runs.sides.items()},
        "idle_share": {side: significant(idle_share(profile)) for side, profile in runs.sides.items()},
        "threads": either.ledger.threads,
        "workers": either.manifest["workers"],
        "cycles": either.manifest["cycles"],
    }
    if runs.comparison is None:
        return {**panel, "sentence": _alone(either), "gain": None, "verdict": _status(either)}
    return {**panel, **_of_pairs(runs.comparison)}


def _alone(profile: Profile) -> str:
    name, span = profile.manifest["scenario"].get("name", "The run"), seconds_words(profile.ledger.span_ns / 1e9)
    return f"{name} took {span} {in_mode(profile)}; cores stood idle for {100 * idle_share(profile):.1f} % of it."


def _status(profile: Profile) -> dict[str, Any]:
    complete = profile.manifest["status"] == "complete"
    words = (
        "One run alone: nothing to compare its bits with."
        if complete
        else f"The run is not complete: {profile.manifest['message']}"
    )
    return {"good": complete, "words": words}


def _of_pairs(comparison: Comparison) -> dict[str, Any]:
    gain, (left, right) = comparison.gain, comparison.shown
    _, _, sentence = headline(comparison).partition(": ")
    sentence = _ADVICE.sub(".", sentence)
    handed = 1.0 - 1.0 / gain.median
    return {
        "sentence": sentence[0].upper() + sentence[1:],
        "gain": {
            "median": significant(gain.median, 6),
            "low": None if gain.low is None else significant(gain.low, 6),
            "high": None if gain.high is None else significant(gain.high, 6),
            "stands_out": gain.significant,
            "pairs": len(gain.ratios),
            "handed_back_share": significant(handed),
            "handed_back_core_s": seconds(left.ledger.available_ns - right.ledger.available_ns),
        },
        "verdict": _bits(comparison),
    }


def _bits(comparison: Comparison) -> dict[str, Any]:
    if comparison.identical:
        runs = 2 * len(comparison.lockstep)
        return {"good": True, "words": f"All {runs} runs end in the same bits."}
    return {"good": False, "words": f"The runs do NOT end in the same bits: {describe_difference(comparison)}"}
