"""Trying advice for real: baseline and trial run in turn, and the measured gain beside the forecast one."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from scipy import stats

from breakstep.commands.session import Session
from breakstep.commands.shared import choose_place, open_dispatch
from breakstep.forecast.advice import Advice, Trial
from breakstep.forecast.basis import Basis

LEVEL = 0.95


def verify_advice(basis: Basis, advice: Advice, workers: int, threads: int, pairs: int, folder: Path) -> dict[str, Any]:
    """Run both sides so many times in alternating order.

    Judged is the gain as a share of the baseline's time: the machine may be slower or faster today than on the day of
    recording, and both sides with it.
    """
    manifest = basis.first.profile.manifest
    sides = {"before": advice.baseline, "after": advice.trial}
    sessions = {name: _session(basis, trial) for name, trial in sides.items()}
    place = choose_place(sessions["before"].scenario.run, manifest["dispatch"], workers, threads, None, None)
    spans: dict[str, list[float]] = {name: [] for name in sides}
    with open_dispatch(place) as engine:
        for pair in range(1, pairs + 1):
            for name in sides if pair % 2 else reversed(sides):
                title = f"pair {pair} of {pairs}, {name}"
                where = folder / f"{name}-{pair}"
                _, profile = sessions[name].execute(engine, sides[name].barriers, where, title=title)
                spans[name].append(profile.ledger.span_ns * 1e-9)
    return figures_of(advice, np.array(spans["before"]), np.array(spans["after"]))


def _session(basis: Basis, trial: Trial) -> Session:
    manifest = basis.first.profile.manifest
    placement = trial.placement or manifest["notes"].get("placement")
    source = basis.first.profile.folder or Path("profile")
    return Session.from_tables(manifest["scenario"], source, trial.overrides, placement, 0)


def figures_of(advice: Advice, before: np.ndarray[Any, Any], after: np.ndarray[Any, Any]) -> dict[str, Any]:
    """Measured beside forecast. The measured interval is Student's t on the gains of the pairs."""
    gains = before - after
    half = float(stats.t.ppf(0.5 + LEVEL / 2.0, len(gains) - 1)) * float(np.std(gains, ddof=1)) / len(gains) ** 0.5
    base, gain, mean = float(np.median(before)), float(np.median(gains)), float(gains.mean())
    expected = advice.baseline_s
    return {
        "do": advice.do,
        "pairs": len(gains),
        "forecast_baseline_s": expected,
        "forecast_gain_s": advice.gain_s,
        "forecast_low_s": advice.low_s,
        "forecast_high_s": advice.high_s,
        "baseline_s": base,
        "measured_gain_s": gain,
        "measured_low_s": mean - half,
        "measured_high_s": mean + half,
        "within": bool(advice.low_s / expected <= gain / base <= advice.high_s / expected),
        "contradicts": bool(
            (mean + half) / base < advice.low_s / expected or (mean - half) / base > advice.high_s / expected
        ),
    }
