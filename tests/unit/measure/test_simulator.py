"""The command from end to end on small sizes, and what its text must hold. No speed is asserted here."""

from __future__ import annotations

import json
from dataclasses import asdict
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from breakstep.cli import cli
from breakstep.measure import simulator as measured
from breakstep.measure.simulator import Speed, harmonic, simulator_figures
from breakstep.report.simulator import simulator_lines


def speed(what: str, met: bool | None, **more: Any) -> dict[str, Any]:
    return asdict(Speed(what, 2_000_000, 0.5, 1.0, met=met, **more))


def test_text_says_what_is_met() -> None:
    rows = [
        speed("one", True),
        speed("two", False, memory_mib=300.0, needed_mib=200.0),
        speed("three", True, found="x"),
    ]
    lines = simulator_lines({"cores": 2, "quick": False, "rows": rows})
    assert lines[3].split() == ["one", "0.50", "4.0", "1", "s", "met"]
    assert lines[4].endswith("1 s NOT MET")
    assert "300 MiB, needed 200 MiB" in lines[5]
    assert lines[-1] == "Requirements: 2 of 3 met. Not met: two."


def test_small_sizes_are_not_judged() -> None:
    lines = simulator_lines({"cores": 1, "quick": True, "rows": [speed("one", None)]})
    assert lines[-1].startswith("Smaller sizes")
    assert lines[0].startswith("1 core;")


def test_harmonic() -> None:
    assert harmonic(3) == pytest.approx(11 / 6, rel=1e-15)


@pytest.mark.parametrize(("seconds", "memory", "met"), [(0.5, 100.0, True), (2.0, 100.0, False), (0.5, 300.0, False)])
def test_verdicts_come_from_seconds_and_memory(
    monkeypatch: pytest.MonkeyPatch, seconds: float, memory: float, met: bool
) -> None:
    found = Speed("x", 1, seconds, 1.0, memory, 200.0)
    monkeypatch.setattr(measured, "_measured", lambda sizes, progress: iter([found]))
    assert simulator_figures()["rows"][0]["met"] is met
    assert simulator_figures(quick=True)["rows"][0]["met"] is None


@pytest.mark.slow
def test_command_on_small_sizes(tmp_path: Path) -> None:
    answer = CliRunner().invoke(cli, ["simulator", "--quick", "--json", str(tmp_path / "speeds.json")])
    assert answer.exit_code == 0, answer.output
    rows = json.loads((tmp_path / "speeds.json").read_text())["rows"]
    assert len(rows) == 9
    assert all(row["seconds"] > 0 and row["met"] is None for row in rows)
    assert "1,000,000 tasks by rule" in answer.output
