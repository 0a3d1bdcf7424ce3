"""What false declarations cost, counted by hand on small meshes; waits; in-place hazards."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from breakstep.audit.costs import edges_of, inplace_hazards, redeclared, waits_on, with_cost
from breakstep.audit.findings import NOTE, Finding
from breakstep.engine.program import Program
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.profile.store import read_profile
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import lie
from breakstep.steps.step import Read, Step
from tests import toys

RECORDED = Path(__file__).parents[3] / "profiles" / "single_spark" / "tasked"


def ring(*steps: Step) -> Program:
    """Four tiles of 3 zones in a periodic row, each with two neighbours."""
    mesh = Mesh((12,), (1.0,), ((Edge.PERIODIC,) * 2,))
    problem = Problem("ring", "an invented problem", mesh, toys.FIELDS, lie(steps), toys.waves, 2)
    return Program(problem, (3,))


SMOOTH = Step("smooth", toys.smooth, (Read("u", (1, 0, 0)),), ("u",))
LOCAL = Step("trade", toys.trade, (Read("u"), Read("w")), ("u", "w"))


def test_edges_of_a_ring() -> None:
    edges = edges_of(ring(SMOOTH))
    assert edges.data == 4 * 3  # each tile reads itself and two neighbours
    assert len(edges.between) == 4 * 2
    assert edges.ghost_bytes == 4 * 2 * 8


def test_a_local_step_ties_no_tiles_together() -> None:
    edges = edges_of(ring(LOCAL))
    assert not edges.between
    assert edges.ghost_bytes == 0


def test_an_unused_halo_is_priced() -> None:
    change = {"halo": [0, 0, 0], "corners": False}
    finding = with_cost(ring(SMOOTH), Finding("smooth", "unused halo", "x", field="u", change=change))
    assert finding.cost == (
        "Declared truly, a cycle has 8 fewer edges between tasks (now 12), 64 B less of ghost zones (now 64 B)."
    )


def test_an_undeclared_halo_is_priced() -> None:
    change = {"halo": [2, 0, 0], "corners": False}
    finding = with_cost(ring(SMOOTH), Finding("smooth", "undeclared halo", "x", field="u", change=change))
    assert finding.cost == "Declared truly, a cycle has 64 B more of ghost zones (now 64 B)."


def test_a_halo_wider_than_a_tile_is_said() -> None:
    change = {"halo": [5, 0, 0], "corners": False}
    finding = with_cost(ring(SMOOTH), Finding("smooth", "undeclared halo", "x", field="u", change=change))
    assert "does not fit this tiling" in finding.cost
    assert "narrowest tile has 3" in finding.cost


def test_an_undeclared_field_of_another_step_is_priced() -> None:
    steps = (SMOOTH, Step("drift", toys.drift, (Read("w", (3, 0, 0)),), ("w",)))
    change = {"halo": [0, 0, 0], "corners": False}
    before = ring(*steps)
    after = redeclared(before, Finding("smooth", "undeclared field", "x", field="w", change=change))
    assert after is not None
    assert edges_of(after).data - edges_of(before).data == 4  # each tile now waits for its own drift, too


def test_edges_of_steps_that_are_fused_differently_are_the_same() -> None:
    wide = Step("grow", toys.smooth, (Read("u", (1, 0, 0)),), ("u",))
    local = Step("grow", toys.smooth, (Read("u"),), ("u",))
    apart, fused = edges_of(ring(SMOOTH, wide)), edges_of(ring(SMOOTH, local))
    assert {edge[0] for edge in apart.between} == {"smooth", "grow"}
    assert {edge[0] for edge in apart.between - fused.between} == {"grow"}


def test_a_note_costs_nothing() -> None:
    note = Finding("smooth", "position", "x", NOTE)
    assert with_cost(ring(SMOOTH), note) is note


def test_waits_on_edges_are_bounded_by_the_waits_for_neighbours() -> None:
    profile = read_profile(RECORDED)
    total = int(profile.ledger.gaps["neighbour"].sum())
    stages = {part for stage in set(profile.tasks["stage"].astype(str)) for part in stage.split("+")}
    tiles = range(profile.tile_count)
    every = frozenset((c, t, p, n) for c in stages for p in stages for t in tiles for n in tiles if t != n)
    found, whole = waits_on(profile, every)
    assert whole == total > 0
    assert 0 < found <= total
    assert waits_on(profile, frozenset()) == (0, total)
    assert waits_on(profile, every, every) == (0, total)  # an edge that another read needs as well stays


def test_a_step_that_updates_what_it_reads_needs_a_second_buffer() -> None:
    (hazard,) = inplace_hazards(ring(SMOOTH, LOCAL))
    assert (hazard["field"], hazard["axes"]) == ("u", ["x"])
    assert hazard["same_phase"]
    assert hazard["buffer_bytes"] == 12 * 8
    assert hazard["rim_bytes"] == 4 * 2 * 8


def test_a_later_writer_is_named() -> None:
    look = Step("look", toys.smooth, (Read("u", (1, 0, 0)),), ("v",))
    late = replace(SMOOTH, reads=(Read("u"), Read("w", (1, 0, 0))), name="late")
    found = inplace_hazards(ring(look, late))
    assert [(h["field"], h["reader"], h["writer"]) for h in found] == [("u", "look", "late")]
    assert not found[0]["same_phase"]
