"""``advise --verify`` runs its first advice for real and puts what was measured beside what it said."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from tests.unit.commands.conftest import Shell, breakstep

__all__ = ["breakstep"]


@pytest.mark.slow
@pytest.mark.cluster
def test_the_first_advice_is_tried(breakstep: Shell) -> None:
    """Small runs on a machine that may be busy: that both sides ran and were compared, not how well they agree."""
    small = ("--set", "mesh.zones=[64, 64]", "--set", "mesh.tile=[16, 16]", "--set", "run.cycles=4")
    assert breakstep("compare", "single_spark", *small, "--pairs", "1", "--out", "recorded").code == 0
    answer = breakstep("advise", "recorded", "--verify", "--pairs", "2", "--out", "tried", "--json", "figures.json")
    assert answer.code == 0, answer.err
    found = json.loads(Path("figures.json").read_text(encoding="utf-8"))
    verify = found["verify"]
    assert verify["do"] == found["advice"][0]["do"]
    assert verify["measured_low_s"] <= verify["measured_high_s"]
    assert {path.name for path in Path("tried").iterdir()} == {"before-1", "before-2", "after-1", "after-2"}
    assert "Tried for real" in answer.out
