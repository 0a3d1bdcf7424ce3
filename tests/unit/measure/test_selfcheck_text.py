"""The text of the self-check from invented figures, and the command from end to end."""

from __future__ import annotations

import json
from copy import deepcopy
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from breakstep.measure import cost, selfcheck
from breakstep.measure.selfcheck import Extent
from breakstep.report.selfcheck import WIDTH, selfcheck_lines

KEYS = {
    *("quick", "cores", "workers", "rounds", "native_cpu_us_per_task", "resident_cpu_us_per_task", "ratio"),
    *("grain_ms", "recording_cost", "recording", "idle_cores", "costs", "threads_cost", "grain", "null_gain"),
    *("balanced_gain", "long_run", "sharing", "others_cores", "seconds", "warnings"),
}


def middle(value: float) -> dict[str, float]:
    return {"median": value, "low": 0.9 * value, "high": 1.1 * value}


def costs(native: float | None, resident: float) -> dict[str, Any]:
    pairs = [("native", native), ("resident", resident)]
    found = {name: {"cpu_us": middle(us), "wall_us": middle(0.5 * us)} for name, us in pairs if us is not None}
    return {**found, "ratio": None if native is None else middle(native / resident)}


def gain(median: float, half: float, pairs: int = 9) -> dict[str, Any]:
    significant = abs(median - 1.0) > half
    return {
        "median": median,
        "low": median - half,
        "high": median + half,
        "significant": significant,
        "pairs": pairs,
        "task_ms": 5.0,
    }


def grain(median: float, shares: dict[float, float], extrapolated: bool = False) -> dict[str, Any]:
    points = [{"nominal_ms": ms, "dispatch": middle(s), "cpu": middle(2 * s)} for ms, s in shares.items()]
    return {**middle(median), "extrapolated": extrapolated, "limit": 0.05, "points": points}


def sharing(holds_lock: bool, ms: float, threads: float, processes: float) -> dict[str, Any]:
    return {"holds_lock": holds_lock, "task_ms": ms, "threads": middle(threads), "processes": middle(processes)}


def invented_figures() -> dict[str, Any]:
    """Everything at once, with numbers as wide as they are likely to come."""
    one = {"workers": 2, "threads": 1}
    recording = {"median": 0.004, "low": -0.0123, "high": 0.1234, "pairs": 9, "task_ms": 5.0}
    return {
        "quick": False,
        "cores": 2,
        "workers": 2,
        "rounds": 3,
        "ratio": 30.0,
        "others_cores": 0.04,
        "native_cpu_us_per_task": 1500.0,
        "resident_cpu_us_per_task": 50.0,
        "idle_cores": {"client": 0.022, "workers": 0.031},
        "costs": [{**case.facts(), **one, **costs(5432.1, 198.7)} for case in cost.ALL if case != cost.HEADLINE]
        + [{**cost.HEADLINE.facts(), **one, **costs(1500.0, 50.0)}],
        "threads_cost": {**cost.HEADLINE.facts(), "workers": 1, "threads": 2, **costs(None, 49.0)},
        "grain": {
            "resident": grain(1.04, {0.2: 0.31, 1.0: 0.052, 5.0: 0.017}),
            "native": grain(61.0, {5.0: 0.22, 50.0: 0.061}, extrapolated=True),
        },
        "recording": {
            **recording,
            "cpu": recording,
            "noop_cpu_us": middle(14.0),
            "calls_cpu_us": middle(14.2),
            "share": middle(0.0028),
            "limit": 0.01,
        },
        "null_gain": gain(1.002, 0.011),
        "balanced_gain": gain(1.03, 0.02),
        "long_run": {
            "tasks": 1_024_000,
            "edges": 3_071_232,
            "seconds": 35.2,
            "cpu_us_per_task": 71.0,
            "profile_seconds": 3.2,
            "wall_us_by_quarter": [33.0, 34.0, 34.0, 35.0],
            "worker_bytes_per_task": 206.0,
            "record_bytes_per_task": 142.0,
            "unrecorded_worker_bytes_per_task": 1.0,
        },
        "sharing": [
            *(sharing(False, ms, 94.0, 81.0) for ms in (0.5, 2.0, 5.0)),
            *(sharing(True, ms, 47.0, processes) for ms, processes in ((0.5, 46.0), (2.0, 88.0), (5.0, 90.0))),
        ],
        "warnings": ["other programs kept 1.2 cores busy"],
    }


def text_of(figures: dict[str, Any]) -> str:
    """The lines as one, with runs of blanks made one."""
    return " ".join(" ".join(selfcheck_lines(figures)).split())


def test_recording_that_costs_too_much_is_called_out() -> None:
    figures = invented_figures()
    figures["recording"]["share"] = middle(0.011)
    assert "1.10 % (0.99 to 1.21) of 5 ms, ABOVE the 1 % allowed;" in text_of(figures)


def test_a_cost_becomes_a_share_of_a_task() -> None:
    """50 us are a hundredth of 5 ms."""
    assert cost.share_of_task({"median": 50.0}, 5.0) == pytest.approx({"median": 0.01}, rel=1e-15)


def test_text_fits_a_terminal() -> None:
    lines = selfcheck_lines(invented_figures())
    assert max(len(line) for line in lines) <= WIDTH
    assert len(lines) < 40


def test_text_gives_every_figure() -> None:
    text = text_of(invented_figures())
    assert "32 cyclic 5432 (2716) 199 (99) 27.3 5432 (2716) 199 (99) 27.3" in text
    assert "256 blocks 2-D 5432 (2716) 199 (99) 27.3 256 2 threads 49 (24)" in text
    assert (
        "256 tiles in blocks, 8 B: 1500 (1350 to 1650) us of CPU time natively, 50 (45 to 55) resident: 30 times"
        in text
    )
    assert "resident: core-seconds 31.0 5.2 1.7" in text
    assert "from 1.04 ms (0.94-1.14) resident, 61.0 ms (54.9-67.1, extrapolated) native" in text
    assert "recording: wall +0.4 % (-1.2 to +12.3), CPU +0.4 % (-1.2 to +12.3)" in text
    assert "Recording takes 14.2 us of CPU time a task, 0.28 % (0.25 to 0.31) of 5 ms, below the 1 % allowed;" in text
    assert "a task that does nothing takes 14 (13 to 15) us more." in text
    assert "Workers grew by 206 bytes a task, 142 of them the record; without recording 1." in text
    assert "of which other programs kept 0.0 busy" in text
    assert text.endswith("Warning: other programs kept 1.2 cores busy")


def test_shares_stand_below_their_length() -> None:
    """Natively 5 and 50 ms were measured, so the columns of 0.2 and 1 ms stay empty."""
    lines = selfcheck_lines(invented_figures())
    head = next(line for line in lines if line.startswith("% taken"))
    native = next(line for line in lines if line.startswith("native: core"))
    assert native.index("22.0") + len("22.0") == head.index(" 5 ") + len(" 5")
    assert native.split()[2:] == ["22.0", "6.1"]


def test_a_gain_of_lockstep_over_itself_is_called_wrong() -> None:
    figures = invented_figures()
    assert "lockstep against itself: 1.002 (0.991 to 1.013): no gain, as it must be" in text_of(figures)
    figures["null_gain"] = gain(1.05, 0.011)
    assert "1.050 (1.039 to 1.061): called a difference, WRONGLY" in text_of(figures)


def test_the_better_crew_is_named_length_by_length_where_it_changes() -> None:
    figures = invented_figures()
    better = "where kernels release the lock, threads; where kernels hold it, either at 0.5 ms, processes at 2 ms"
    assert better in text_of(figures)
    for row in figures["sharing"]:
        row["threads"], row["processes"] = middle(50.0), middle(50.0)
    assert "release the lock, either; where kernels hold it, either." in text_of(figures)


def test_what_could_not_be_measured_is_left_out_in_words() -> None:
    figures = invented_figures()
    figures |= {"others_cores": None, "long_run": None}
    text = text_of(figures)
    assert "2 workers of one thread on 2 cores; medians" in text
    assert "No long run was made." in text
    blind = deepcopy(invented_figures())
    blind["long_run"] |= {"worker_bytes_per_task": None, "wall_us_by_quarter": None}
    assert "How memory grew cannot be told." in text_of(blind)
    assert "by quarter" not in text_of(blind)


TINY = Extent(
    rounds=1,
    cases=(cost.HEADLINE,),
    sizes={"native": (256, 512), "resident": (256, 2048)},
    lengths={"resident": (0.5,), "native": (5.0,)},
    shared=(0.5,),
    seconds=0.02,
    shared_seconds=0.02,
    pairs=2,
    pair_cycles=2,
    long_cycles=4,
    idle_seconds=0.1,
)


@pytest.mark.slow
@pytest.mark.cluster
def test_command_from_end_to_end(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Every run's answer is checked within; here, that all figures are there and can be true."""
    from breakstep.commands.selfcheck import selfcheck as command

    monkeypatch.setattr(selfcheck, "QUICK", TINY)
    file = tmp_path / "selfcheck.json"
    result = CliRunner().invoke(command, ["--quick", "--json", str(file)], catch_exceptions=False)
    assert result.exit_code == 0, result.output
    assert max(len(line) for line in result.stdout.splitlines()) <= WIDTH
    figures = json.loads(file.read_text("utf-8"))
    assert set(figures) == KEYS
    _check_costs(figures)
    _check_long_run(figures["long_run"])
    for name in ("null_gain", "balanced_gain"):
        assert figures[name]["low"] <= figures[name]["high"]
        assert figures[name]["pairs"] == 2
    assert [row["holds_lock"] for row in figures["sharing"]] == [False, True]
    for row in figures["sharing"]:
        assert all(0.0 < row[crew]["median"] <= 100.0 for crew in ("threads", "processes"))


def _check_costs(figures: dict[str, Any]) -> None:
    (row,) = figures["costs"]
    assert row["native"]["cpu_us"]["median"] == figures["native_cpu_us_per_task"]
    assert row["resident"]["cpu_us"]["median"] == figures["resident_cpu_us_per_task"]
    assert figures["threads_cost"]["workers"] == 1
    assert figures["threads_cost"]["threads"] == 2
    for name in ("native", "resident"):
        (point,) = figures["grain"][name]["points"]
        assert 0.0 < point["dispatch"]["median"] < 1.0
        assert figures["grain_ms"][name] == figures["grain"][name]["median"] > 0.0


def _check_long_run(found: dict[str, Any]) -> None:
    """4 stages on 256 tiles; each task after the first step reads three others."""
    assert found["tasks"] == 4 * 4 * 256
    assert found["edges"] == (4 * 4 - 1) * 256 * 3
    assert found["closure_error"] < 1e-3  # the ledger's own limit
    assert found["record_bytes_per_task"] > 0.0
