"""The compiled hydrodynamics sweep beside the same scheme on whole numpy arrays."""

from __future__ import annotations

from functools import partial

import numpy as np

from breakstep.errors import KernelError
from breakstep.kernels.burning.network import load_network
from breakstep.kernels.eos import GammaLaw, Stellar
from breakstep.kernels.hydro import numpy_form as hydro_numpy
from breakstep.kernels.hydro import sweep as hydro
from breakstep.kernels.hydro.rows import HALO
from breakstep.measure.states import Array, Waves
from breakstep.measure.timing import Effort, Row, Work, ratio, take_turns

SIDE = 64
NEEDED = 5.0  # what compiling must gain over numpy for the gamma law, whose every operation numpy does itself
GASES: dict[str, GammaLaw | Stellar] = {"gamma law": GammaLaw(5.0 / 3.0), "stellar": Stellar()}
_DT, _SPACING = 1e-4, 1e6  # [s], [cm]: a Courant number of about 0.1

Arguments = tuple[Array, int, float, float, Array, Array, Array]


def sweep_arguments(eos: GammaLaw | Stellar, axis: int, side: int = SIDE) -> Arguments:
    """What both forms of the sweep take, for a square tile with halo along ``axis``."""
    network = load_network("alpha13")
    shape = [side, side, 1]
    shape[axis] += 2 * HALO
    gas = Waves((shape[0], shape[1], 1), len(network.names)).gas()
    return gas, axis, _DT, _SPACING, eos.vector, network.mass_numbers, network.charges


def sweep_work() -> Work:
    """One compiled sweep along x with the gamma law."""
    return partial(hydro.sweep, *sweep_arguments(GASES["gamma law"], 0))


def hydro_rows(effort: Effort) -> list[Row]:
    """Nanoseconds a zone, for both equations of state and both axes of a plane."""
    return [_row(name, axis, effort) for name in GASES for axis in (0, 1)]


def _row(name: str, axis: int, effort: Effort) -> Row:
    arguments = sweep_arguments(GASES[name], axis)
    _check(arguments)
    works: dict[str, Work] = {
        "ours": partial(hydro.sweep, *arguments),
        "numpy": partial(hydro_numpy.sweep, *arguments),
    }
    samples = take_turns(works, effort)
    ours, theirs = (1e9 * min(samples[who]) / SIDE**2 for who in works)
    # the stellar mixture's numpy form borrows the compiled equation of state, so nothing is asked of it
    needed = NEEDED if name == "gamma law" else None
    details = {"bytes_per_zone": 16 * arguments[0].shape[0]}  # every component read and written once
    return Row(f"{name}, {'xyz'[axis]}", ours, theirs, ratio(samples, "numpy", "ours"), needed, details=details)


def _check(arguments: Arguments) -> None:
    """A ratio says nothing unless both compute the same."""
    ours, _, bad = hydro.sweep(*arguments)
    theirs, _ = hydro_numpy.sweep(*arguments)
    if bad >= 0 or not np.array_equal(ours, theirs):
        raise KernelError("the compiled sweep and its numpy form differ; run the tests of the hydrodynamics")
