"""``breakstep audit``: exit codes, the text at 80 columns, the JSON, and what cannot be audited."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import pytest
from click.testing import CliRunner

from breakstep.audit.findings import Finding
from breakstep.audit.run import PartAudit, audit_program, tidied
from breakstep.audit.wording import audit_figures, audit_lines
from breakstep.cli import cli
from breakstep.engine.program import Program
from breakstep.errors import DeclarationError, KernelError, ScenarioError
from breakstep.mesh.mesh import Edge
from breakstep.steps.splitting import lie
from breakstep.steps.step import Array, Call, Read, Step
from tests import toys
from tests.audit_cases.common import Arrays, case_program

MODULE = """
import numpy as np
from breakstep import Edge, Field, Mesh, Problem, Read, Setup, Step, lie

def warm(arrays, call):
    u = arrays["u"]
    return {"u": u[:, 2:-2] + 0.1 * (u[:, 3:-1] - 2 * u[:, 2:-2] + u[:, 1:-3]) + 0.0 * arrays["w"].mean()}

def start(tile, mesh):
    x = np.arange(tile.origin[0], tile.origin[0] + tile.shape[0])
    return {"u": np.sin(x)[None, :, None, None], "w": np.cos(x)[None, :, None, None]}

def setup():
    mesh = Mesh((24,), (1.0,), ((Edge.PERIODIC, Edge.PERIODIC),))
    step = Step("warm", warm, (Read("u", (2, 0, 0)),), ("u",))
    fields = (Field("u", ("u",)), Field("w", ("w",)))
    return Setup(Problem("false", "an invented problem", mesh, fields, lie([step]), start, 4), tile=(6,))
"""


def waits_for_ever(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Does not come back in the third cycle."""
    while call.cycle > 2:
        pass
    return {"u": arrays["u"] * 1.0}


@pytest.fixture
def false_module(tmp_path: Path) -> Path:
    path = tmp_path / "false.py"
    path.write_text(MODULE)
    return path


def test_a_false_declaration_is_reported_with_its_price(false_module: Path, tmp_path: Path) -> None:
    figures = tmp_path / "figures.json"
    done = CliRunner().invoke(cli, ["audit", str(false_module), "--json", str(figures)], standalone_mode=False)
    assert done.exception is None
    assert done.return_value == 1
    assert "step warm: 2 faults" in done.output
    text = " ".join(done.output.split())
    assert "Of the halo (2, 0, 0) of 'u' only (1, 0, 0) was seen to matter" in text
    assert "64 B less of ghost zones (now 128 B)" in text
    assert "It reads 'w' although it was not seen to matter" in text
    assert "second buffer" in text
    assert max(map(len, done.output.splitlines())) <= 80
    written = json.loads(figures.read_text())
    assert written["faults"] == 2
    assert {f["kind"] for part in written["parts"] for f in part["findings"]} == {"unused halo", "undeclared field"}


@pytest.mark.slow
def test_a_true_declaration_ends_with_zero() -> None:
    done = CliRunner().invoke(cli, ["audit", "shock_tube"], standalone_mode=False)
    assert done.exception is None
    assert done.return_value == 0
    assert "step sweep_x: clean" in done.output


def test_a_scenario_that_does_not_exist_is_refused() -> None:
    done = CliRunner().invoke(cli, ["audit", "no_such_thing"], standalone_mode=False)
    assert isinstance(done.exception, ScenarioError)


def test_a_kernel_that_cannot_travel_is_refused() -> None:
    problem = toys.Toy().problem()
    step = Step("s", lambda arrays, call: {"u": arrays["u"] * 1.0}, (Read("u"),), ("u",))
    program = Program(replace(problem, splitting=lie([step])), (4, 3))
    with pytest.raises(DeclarationError, match="top level of a module"):
        audit_program(program)


def no_start(tile: object, mesh: object) -> dict[str, Array]:
    """An initial state that fails."""
    raise ValueError("nothing to begin with")


def test_a_start_that_fails_is_refused() -> None:
    program = Program(replace(toys.Toy().problem(), initial=no_start), (4, 3))
    with pytest.raises(KernelError, match="nothing to begin with"):
        audit_program(program)


@pytest.mark.slow
def test_a_step_that_never_returns_is_a_finding_and_others_are_audited() -> None:
    program = case_program([])
    steps = [*program.problem.splitting.orders[0], Step("hangs", waits_for_ever, (Read("u"),), ("u",))]
    program = Program(replace(program.problem, splitting=lie(steps, program.problem.splitting.reductions)), (6, 8))
    parts = {part.name: part for part in audit_program(program, timeout=8.0)}  # a busy machine takes 3 s to start
    assert [finding.kind for finding in parts["hangs"].faults] == ["timeout"]
    assert not parts["evolve_u"].faults
    assert parts["evolve_u"].samples


def test_what_only_follows_is_left_out() -> None:
    found = [Finding("s", kind, f"{kind}.") for kind in ("tiling", "undeclared halo", "undeclared halo")]
    assert [finding.kind for finding in tidied(found)] == ["undeclared halo"]


def test_a_clean_audit_says_how_sure_it_is() -> None:
    parts = [PartAudit("s", "step", 6, 250), PartAudit("dt", "reduction", 6, 150)]
    lines = list(audit_lines("gas", parts, []))
    assert " ".join(lines[:2]).startswith(
        "gas: the declarations of all 2 steps and reductions hold, as far as 400 calls"
    )
    assert audit_figures("gas", parts, [])["faults"] == 0


@pytest.mark.slow
def test_steps_by_timer_are_named_and_not_probed() -> None:
    done = CliRunner().invoke(cli, ["audit", "moving_hot_ranks"], standalone_mode=False)
    assert done.exception is None
    assert done.return_value == 0
    assert "step sweep: by timer (6 samples, 0 calls)" in done.output
    assert "reduction dt: clean" in done.output


@pytest.mark.slow
@pytest.mark.parametrize(("zones", "tile"), [((12,), (4,)), ((8, 6, 6), (4, 3, 3))])
def test_the_toy_is_clean_in_one_and_three_dimensions(zones: tuple[int, ...], tile: tuple[int, ...]) -> None:
    edges = (Edge.PERIODIC, Edge.REFLECTING, Edge.FIXED)
    toy = toys.Toy(zones, edges, two_orders=len(zones) > 1, two_passes=len(zones) > 1, dt_lag=1)
    parts = audit_program(Program(toy.problem(), tile))
    assert {part.name: [finding.text for finding in part.faults] for part in parts if part.faults} == {}
    assert all(part.samples >= 4 for part in parts)
