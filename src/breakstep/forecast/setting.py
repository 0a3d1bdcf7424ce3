"""A setting: a machine, a question and a number of workers made into what the replay engines take."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from breakstep.forecast.basis import Basis
from breakstep.forecast.crowd import python_stretch
from breakstep.forecast.graph import Int32s
from breakstep.forecast.lift import Lifted
from breakstep.forecast.machines import RECORDED, Machine, Network, Runtime
from breakstep.forecast.measured import Dispatch
from breakstep.forecast.model import MachineModel
from breakstep.forecast.program import Program
from breakstep.forecast.question import Question
from breakstep.forecast.retile import retiled
from breakstep.partition import ORDERS, divided

#: Dask's own dispatch: a task between two worker processes took 2.5 ms, measured on a loaded two-core machine; its
#: documentation speaks of about 1 ms (distributed.dask.org, "Efficiency").
NATIVE_OVERHEAD_US, NATIVE_MESSAGE_US = 2500.0, 2000.0
#: A compiled runtime: common practice, not a measurement.
COMPILED_OVERHEAD_US, COMPILED_MESSAGE_US = 1.0, 2.0
COMPILED_REST = 0.05  # of what the interpreter spends inside a task on checks and bookkeeping


@dataclass(frozen=True)
class Setting:
    """Everything that a replay needs beside the program.

    Attributes
    ----------
    model : MachineModel
    cores, nodes : int
        Cores of a node; nodes in use.
    speed : float
        Of a core over that of the machine of recording.
    dispatch : Dispatch
        With the machine's crowding.
    python, rest : float
        Factors on the interpreter's share of a task, and on its bookkeeping alone.
    local_turn_ns : int
        Of a barrier with one worker [ns].
    """

    model: MachineModel
    cores: int
    nodes: int
    speed: float
    dispatch: Dispatch
    python: float
    rest: float
    local_turn_ns: int


def recorded_machine(run: Lifted) -> Machine:
    """The machine of recording, as far as the profile describes it; its network is in the recorded messages."""
    facts = run.profile.manifest["machine"]
    network = Network(latency_us=0.0, bandwidth_gbytes=1.0, local_latency_us=0.0, local_bandwidth_gbytes=1.0)
    title = f"the machine of recording: {facts.get('model', 'unknown')}, {run.cores} cores"
    return Machine(name=RECORDED, title=title, cores=run.cores, threads=run.threads, network=network)


def setting_of(basis: Basis, machine: Machine, question: Question, workers: int, larger: float = 1.0) -> Setting:
    """The setting for so many workers.

    Parameters
    ----------
    larger : float
        Factor on our own dispatch's overhead, for other tiles.
    """
    threads = question.threads or machine.threads
    kind, overhead_us, message_us = _runtime(machine.runtime, question, basis.dispatch, workers)
    nodes = machine.nodes_for(workers, threads)
    latency, gbytes = _link(machine.network, question, nodes)
    dispatch = basis.dispatch
    if machine.crowding is not None:
        dispatch = replace(dispatch, shared=machine.crowding)
    ours = kind != "compiled"
    overhead_us *= larger if ours else 1.0
    hop_us = dispatch.hop_ns * 1e-3 if ours else message_us
    model = MachineModel(
        workers=workers,
        threads=threads,
        overhead_ns=round(overhead_us * 1e3),
        alpha_ns=round((message_us + latency) * 1e3),
        ps_per_byte=round(1000.0 / gbytes),
        contention=machine.network.contention and nodes > 1,
        hop_ns=round((hop_us + latency) * 1e3 * (1.0 - 1.0 / workers)),
        arity=machine.runtime.arity,
        memory_bytes=_memory(machine, question, nodes, workers),
    )
    return Setting(
        model, machine.cores, nodes, machine.speed, dispatch,
        python=python_stretch(workers, dispatch) if ours else 1.0,
        rest=1.0 if ours else COMPILED_REST,
        local_turn_ns=round(dispatch.local_turn_ns) if ours and workers == 1 else 0,
    )  # fmt: skip


def _runtime(runtime: Runtime, question: Question, dispatch: Dispatch, workers: int) -> tuple[str, float, float]:
    """Kind, overhead and message time [us]; the question goes before the machine, and that before the record."""
    named = question.overhead if isinstance(question.overhead, str) and question.overhead else ""
    kind = named or runtime.kind
    own = dispatch.overhead_ns * 1e-3 * python_stretch(workers, dispatch)
    overhead, message = {
        "native": (NATIVE_OVERHEAD_US, NATIVE_MESSAGE_US),
        "compiled": (COMPILED_OVERHEAD_US, COMPILED_MESSAGE_US),
    }.get(kind, (own, dispatch.message_ns * 1e-3))
    if not named:
        overhead = runtime.overhead_us if runtime.overhead_us is not None else overhead
        message = runtime.message_us if runtime.message_us is not None else message
    if not isinstance(question.overhead, str):
        overhead = question.overhead
    return kind, overhead, message


def _link(network: Network, question: Question, nodes: int) -> tuple[float, float]:
    """Latency [us] and bandwidth [GB/s]; the network's as soon as two nodes are in use."""
    latency = network.latency_us if nodes > 1 else network.local_latency_us
    gbytes = network.bandwidth_gbytes if nodes > 1 else network.local_bandwidth_gbytes
    return (
        latency if question.latency_us is None else question.latency_us,
        gbytes if question.bandwidth_gbytes is None else question.bandwidth_gbytes,
    )


def _memory(machine: Machine, question: Question, nodes: int, workers: int) -> int:
    if question.memory_gbytes is not None:
        return round(question.memory_gbytes * 1e9)
    return round(machine.memory_gbytes * 1e9 * nodes / workers) if machine.memory_gbytes else 0


def changed_program(program: Program, question: Question) -> Program:
    """The program that a question asks about.

    Raises
    ------
    ForecastError
        Tiles that do not fit.
    """
    for name, lag in question.lags.items():
        program = program.with_lag(name, lag)
    for name, more in question.iterations.items():
        program = program.with_iterations(name, more)
    if question.window is not None:
        program = replace(program, window=question.window)
    return retiled(program, question.tile) if question.tile else program


def owners_of(basis: Basis, program: Program, question: Question, workers: int) -> Int32s:
    """Owner of each tile: as recorded where nothing says otherwise, else divided anew."""
    run = basis.first
    recorded = run.profile.manifest
    asked = question.placement
    if not asked and not question.tile and workers == run.workers:
        return np.array(recorded["placement"], dtype=np.int32)
    order = asked or str(recorded["notes"].get("placement", "blocks"))
    order = order if order in ORDERS else "curve"
    costs: Sequence[float] = program.costs.duration(question.factors).sum(axis=0).tolist()
    places = [(int(x), int(y), int(z)) for x, y, z in program.tiles.places]
    return np.array(divided(order, places, workers, costs), dtype=np.int32)
