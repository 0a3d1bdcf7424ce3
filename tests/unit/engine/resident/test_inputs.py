"""From a task to its inputs: own zones, rims from here and there, values with their rows."""

from __future__ import annotations

import numpy as np

from breakstep.engine.resident.core import SendRims
from breakstep.engine.resident.inputs import cut_rims, inputs_of, site_of
from tests.unit.engine.resident.hands import DT, SMOOTH, STEERED, finish, line, machine, take


def test_rims_are_copies_that_hold_nothing_of_their_tile() -> None:
    (order,) = machine(line(), [0, 0, 1, 1]).start()
    assert isinstance(order, SendRims)
    ((key, array),) = cut_rims(order, order.arrays).items()
    assert key == ("a", 2, (-1, 0, 0))
    assert array.flags.c_contiguous
    assert array.base is None
    assert np.array_equal(array, order.arrays["a"][:, -1:])


def test_a_task_at_the_seam_sees_both_neighbours() -> None:
    core, other = machine(line(), [0, 0, 1, 1]), machine(line(), [0, 0, 1, 1], worker=1)
    (order,) = other.start()
    assert isinstance(order, SendRims)
    core.start()
    finish(core, take(core))
    core.arrive(("rims", 1, 2, 0), cut_rims(order, order.arrays))
    task = take(core)
    inputs, program = inputs_of(core, task), core.program
    assert site_of(task) == type(site_of(task))(stage=0, tile=1, cycle=0, iteration=-1)
    assert np.array_equal(inputs.own["a"], program.initial(1)["a"])
    assert list(inputs.rims["a"]) == [(-1, 0, 0), (1, 0, 0)]
    assert np.array_equal(inputs.rims["a"][-1, 0, 0], program.initial(0)["a"][:, -1:])
    assert np.array_equal(inputs.rims["a"][1, 0, 0], program.initial(2)["a"][:, :1])
    assert (dict(inputs.values), inputs.passes) == ({}, False)


def test_values_are_rows_of_results_and_cannot_be_written_to() -> None:
    """With a lag of one the first result has a row for each of the first two cycles."""
    core = machine(line([STEERED], reductions=[DT]), [0, 0, 0, 1])
    core.start()
    core.arrive(("value", 0), np.array([[1.0, 2.0], [3.0, 4.0]]))
    tasks = [task for task in iter(core.take, None) if task.phase.cycle == 0]
    value = inputs_of(core, tasks[0]).values["dt"]
    assert value.tolist() == [1.0, 2.0]
    assert not value.flags.writeable


def test_a_local_step_reads_no_rims() -> None:
    core = machine(line([SMOOTH, DT and STEERED], reductions=[DT], tiles=1))
    core.start()
    assert inputs_of(core, take(core)).rims == {}
