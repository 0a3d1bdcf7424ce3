"""The seeded set: every false declaration is found, and no correct step raises an alarm."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from breakstep.audit.run import PartAudit, audit_program
from breakstep.steps.reduction import Reduction
from tests.audit_cases import adversarial, c_cases, numba_cases, python_false, python_true
from tests.audit_cases.common import Case, case_program

EVOLVING = {"evolve_u", "evolve_w", "dt", "other", "largest_move"}  # correct parts that every program has
TIMEOUT = 60.0  # no probe takes a second here; a shared machine may


def missed(audited: list[PartAudit], expected: dict[str, tuple[str, ...]]) -> dict[str, str]:
    """Parts whose faults are not of an expected kind, or that have faults and should have none."""
    wrong = {}
    for part in audited:
        kinds = {finding.kind for finding in part.faults}
        wanted = set(expected.get(part.name, ()))
        if not (kinds & wanted if wanted else not kinds):
            wrong[part.name] = f"expected {sorted(wanted)}, found {[f.text for f in part.findings]}"
        if any("audit itself failed" in finding.text for finding in part.findings):
            wrong[part.name] = f"a probe broke: {[f.text for f in part.findings]}"
    return wrong


def audited(
    cases: list[Case], reductions: dict[str, tuple[Reduction, str]] | None = None, **more: object
) -> tuple[list[PartAudit], dict[str, tuple[str, ...]]]:
    """Audit all cases as steps of one program."""
    listed = reductions or {}
    program = case_program(cases, tuple(r for r, _ in listed.values()), **more)  # type: ignore[arg-type]
    expected = {case.name: case.kinds for case in cases}
    expected |= {name: (kind,) if kind else () for name, (_, kind) in listed.items()}
    return audit_program(program, timeout=TIMEOUT), expected


def names(parts: list[PartAudit]) -> set[str]:
    """Names of parts other than those that every program has."""
    return {part.name for part in parts} - EVOLVING


def test_the_seeded_set_is_large_enough() -> None:
    rows = [(name, kinds) for name, _, _, kinds in c_cases.TABLE]
    rows += [
        (case.name, case.kinds)
        for case in (*python_false.CASES, *adversarial.CASES, *numba_cases.CASES, *python_true.CASES)
    ]
    rows += [(name, (kind,)) for name, (_, kind) in python_false.REDUCTIONS.items()]
    rows += [(name, ()) for name in python_true.REDUCTIONS]
    assert sum(bool(kinds) for _, kinds in rows) >= 40
    assert sum(not kinds for _, kinds in rows) >= 20


@pytest.mark.slow
def test_false_declarations_in_python_are_found() -> None:
    parts, expected = audited(
        [*python_false.CASES, *adversarial.CASES], python_false.REDUCTIONS, fields=(("w2", False),)
    )
    assert names(parts) == set(expected)
    assert missed(parts, expected) == {}


@pytest.mark.slow
def test_correct_steps_raise_no_alarm() -> None:
    more = {"repeats": python_true.REPEATS, "fields": (("w2", False), *python_true.FIELDS)}
    parts, expected = audited(python_true.CASES, python_true.REDUCTIONS, **more)
    assert set(expected) <= names(parts)
    assert missed(parts, expected) == {}


@pytest.mark.slow
def test_false_declarations_in_c_are_found(tmp_path: Path) -> None:
    if shutil.which("gcc") is None:
        pytest.skip("needs gcc to compile the C cases")
    parts, expected = audited(c_cases.cases(c_cases.build(tmp_path)))
    assert names(parts) == set(expected)
    assert missed(parts, expected) == {}


@pytest.mark.slow
def test_false_declarations_in_numba_are_found() -> None:
    parts, expected = audited(numba_cases.CASES)
    assert names(parts) == set(expected)
    assert missed(parts, expected) == {}


@pytest.mark.slow
def test_a_read_that_no_call_shows_is_a_note() -> None:
    parts, _ = audited([adversarial.MISSED])
    (found,) = [part for part in parts if part.name == "seldom_reads"]
    assert not found.faults
    assert [(finding.kind, finding.field) for finding in found.findings] == [("undeclared field", "w")]
