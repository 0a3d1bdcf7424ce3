"""How it was measured, and with what error of the tool's own."""

from __future__ import annotations

from typing import Any

from breakstep.profile.run import Profile
from breakstep.report.page.numbers import seconds, significant
from breakstep.report.page.runs import Runs


def measured_panel(runs: Runs) -> dict[str, Any]:
    """``pairs`` with the spans of each, and for each shown run where, when and how exactly it was recorded."""
    return {"pairs": _pairs(runs), **{side: _of(profile) for side, profile in runs.sides.items()}}


def _pairs(runs: Runs) -> list[dict[str, Any]]:
    comparison = runs.comparison
    if comparison is None:
        return []
    rows = zip(comparison.lockstep, comparison.tasked, comparison.gain.ratios, strict=True)
    return [
        {
            "pair": number,
            "lockstep_s": seconds(left.ledger.span_ns),
            "tasked_s": seconds(right.ledger.span_ns),
            "gain": significant(ratio),
            "shown": left is runs.lockstep,
        }
        for number, (left, right, ratio) in enumerate(rows, 1)
    ]


def _of(profile: Profile) -> dict[str, Any]:
    manifest, ledger = profile.manifest, profile.ledger
    wall, cpu = (int(profile.work[column].sum()) for column in ("compute_ns", "cpu_ns"))
    residual = [int(ns) for ns in manifest["clock"].get("residual_ns", [])]
    return {
        "mode": manifest["mode"],
        "barriers": list(manifest["barriers"]),
        "dispatch": manifest["dispatch"],
        "placement": str(manifest["notes"].get("placement", "")),
        "workers": manifest["workers"],
        "threads": manifest["threads"],
        "cycles": manifest["cycles"],
        "tiles": profile.tile_count,
        "zones": manifest["mesh"]["shape"],
        "tile_shape": manifest["mesh"]["tile_shape"],
        "tasks": len(profile.tasks),
        "mean_step_task_s": _mean_task(profile),
        "lags": dict(manifest["notes"].get("lags", {})),
        "status": manifest["status"],
        "message": manifest["message"],
        "started": manifest["started"],
        "machine": {key: str(value) for key, value in manifest["machine"].items()},
        "software": dict(manifest["software"]),
        "breakstep": manifest["breakstep"],
        "clock_method": str(manifest["clock"].get("method", "")),
        "clock_residual_ns": residual,
        "closure_error": ledger.closure_error,
        "without_processor": significant(1.0 - cpu / wall) if wall else 0.0,
        "recording": manifest["notes"].get("recording"),
        "digest": manifest["digest"],
        "folder": "" if profile.folder is None else profile.folder.name,
    }


def _mean_task(profile: Profile) -> float:
    steps = profile.tasks[(profile.tasks["kind"] == "step").to_numpy()]
    return seconds(float((steps["end_ns"] - steps["start_ns"]).mean())) if len(steps) else 0.0
