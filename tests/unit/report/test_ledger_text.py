"""What ``ledger`` and ``run`` print of one run."""

from __future__ import annotations

import re

import pytest

from breakstep.profile.run import Profile
from breakstep.profile.words import LABELS
from breakstep.report.account import TOP_LINKS, ledger_lines
from breakstep.report.comparison import run_figures
from tests.unit.profile.sketch import draw, manifest
from tests.unit.report.made import BARRED, FREE


def test_one_run() -> None:
    lines = ledger_lines(FREE.profile())
    assert lines[0] == "drawn, tasked: 12 ms on 2 workers with 2 threads, 1 cycle, 4 tasks, drawn"
    assert lines[1] == "dispatch, complete"
    shares = {line[:24].strip(): line.split()[-2] for line in lines[4:12]}
    assert shares == dict.fromkeys(LABELS.values(), "0.0") | {"compute": "75.0", "out of work": "25.0"}
    assert "= threads x time" in lines[12]
    assert "off by 0.0000 %" in lines[12]
    assert max(map(len, lines)) <= 80


def test_the_barriers_of_a_run_are_named() -> None:
    lines = ledger_lines(BARRED.saying(mode="burn,dt", barriers=["burn", "dt"]).profile())
    assert lines[0].startswith("drawn, with the barriers burn and dt: 13 ms")


def test_why_a_run_ended_early_is_told() -> None:
    lines = ledger_lines(FREE.saying(status="failed", message="step burn, tile 1: no convergence").profile())
    assert lines[1] == "dispatch, failed"
    assert lines[2] == "step burn, tile 1: no convergence"


@pytest.mark.parametrize(
    ("notes", "sentence"),
    [
        ({}, ""),
        ({"attempts": 1}, ""),
        (
            {"attempts": 1, "resumed_from_cycle": 12},
            "This run went on from the checkpoint before cycle 12; all figures are of the cycles since.",
        ),
        (
            {"attempts": 3, "resumed_from_cycle": 12},
            "Workers were lost: this is the last of 3 starts, which went on from the checkpoint before cycle 12;"
            " all figures are of the cycles since.",
        ),
        (
            {"attempts": 2},
            "Workers were lost: this is the last of 2 starts, which began anew; all figures are of it alone.",
        ),
    ],
)
def test_what_of_a_run_is_covered_is_told(notes: dict[str, int], sentence: str) -> None:
    profile = FREE.saying(notes=notes).profile()
    lines = ledger_lines(profile)
    assert " ".join(lines[2 : lines.index("")]) == sentence
    figures = run_figures(profile)
    assert figures["attempts"] == notes.get("attempts", 1)
    assert figures["resumed_from_cycle"] == notes.get("resumed_from_cycle")


def test_a_run_that_did_nothing() -> None:
    record = draw("0.0 |....|")
    record.manifest.update(status="interrupted", message="stopped by the user", cycles=0)
    lines = ledger_lines(Profile.from_record(record))
    assert lines[0].startswith("drawn, tasked: 0 ms on 1 worker with 1 thread, 0 cycles, 0 tasks")
    assert "stopped by the user" in lines
    assert "moved between workers: 0 B in 0 transfers" in lines
    assert not re.search("nan", "\n".join(lines))


def test_unevenness_of_nothing_is_a_dash() -> None:
    """A kernel that was called and took no time."""
    record = draw("0.0 |AAAA|\n0.1 |BBBB|")
    record.intervals.append((0, "kernel", "instant", 1, 1, 0))
    (line,) = [line for line in ledger_lines(Profile.from_record(record)) if line.startswith("instant")]
    assert line.split()[-3:] == ["-", "-", "-"]


def test_long_names_and_large_sums_stay_within_80_columns() -> None:
    """A step named in 90 characters, and 2^53 ns of run, the most that a record may hold."""
    name = "a_step_with_quite_a_name_" * 4
    record = draw("0.0 |AAAA|\n0.1 |BBBB|")
    record.intervals.append((0, "kernel", name, 0, 1, 0))
    record.counters.append((0, name, "zones", 10**15))
    record.tasks.append((2, "step", name, 0, 0, -1, 0, 0, 2**52, 2**53, 0, False))
    record.transfers.append((0, name, 0, 0, 100, 1, 1, 4, 5))
    lines = ledger_lines(Profile.from_record(record))
    assert max(map(len, lines)) <= 80
    assert name[:60] in "".join(lines)


def test_many_workers_do_not_flood_the_terminal() -> None:
    """Every worker sends to every other: 30 pairs, of which the busiest are listed and the rest added up."""
    text = "\n".join(f"{worker}.0 |{'ABCDEF'[worker] * 4}|" for worker in range(6))
    record = draw(text)
    for sender in range(6):
        for receiver in range(6):
            if sender != receiver:
                record.transfers.append((sender, "rho", sender, receiver, 100 + 10 * sender, 1, 1, 4, 5))
    lines = ledger_lines(Profile.from_record(record))
    links = [line for line in lines if re.match(r"  worker \d to \d: ", line)]
    assert len(links) == TOP_LINKS == 8
    assert links[0] == "  worker 4 to 0: 140 B"
    # 30 pairs of 100 + 10 x sender make 3750 B; five of 150 B and three of 140 B are listed
    assert "  between 22 other pairs: 2.6 kB" in lines
    assert 5 * (100 + 110 + 120 + 130 + 140 + 150) - 5 * 150 - 3 * 140 == 2580


def test_counters_are_listed_and_checksums_are_not() -> None:
    record = draw("0.0 |AAAA|")
    record.counters.append((0, "work", "zones", 12))
    record.counters.append((0, "work", "checksum:gas", 99))
    lines = ledger_lines(Profile.from_record(record))
    assert "counted in work: zones 12" in lines
    assert not any("checksum" in line for line in lines)


def test_a_scenario_without_a_name() -> None:
    record = draw("0.0 |AAAA|")
    record.manifest = manifest(1, 1, 26, scenario={})
    assert ledger_lines(Profile.from_record(record))[0].startswith("?, tasked:")
