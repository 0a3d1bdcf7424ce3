"""Implicit transport on one tile: what assembling and relaxing cost a zone."""

from __future__ import annotations

from functools import partial

import numpy as np

from breakstep.errors import KernelError
from breakstep.kernels.burning.network import load_network
from breakstep.kernels.constants import A_RAD
from breakstep.kernels.eos import Stellar
from breakstep.kernels.transport import solve as transport
from breakstep.kernels.transport.layout import panel_rows
from breakstep.kernels.transport.matter import describe_matter
from breakstep.kernels.transport.opacity import PhotonGroups, PowerLawOpacity
from breakstep.measure.states import Array, Waves
from breakstep.measure.timing import Effort, Work, take_turns

SIDE = 32
GROUPS = 16
PASSES = 4  # colour passes a call, as in a run
_AXES = (0, 1)
_DT, _SPACING = 1e-6, 1e4  # [s], [cm]
_RADIATION = A_RAD * 1e9**4 / GROUPS  # [erg/cm^3] a group, as much as black-body radiation at 1e9 K


def assemble_work() -> tuple[Work, transport.Assembly, Array]:
    """Assembling a tile from its gas; the result; the radiation it was assembled for."""
    network, wide = load_network("alpha13"), (SIDE + 2, SIDE + 2, 1)
    gas = Waves(wide, len(network.names)).gas()
    groups = PhotonGroups(GROUPS)
    eos = Stellar(radiation=False).vector
    matter = describe_matter(eos, network.mass_numbers, network.charges, groups, PowerLawOpacity())
    radiation = _RADIATION * Waves(wide, GROUPS).gas()[5:] * GROUPS / gas[0]
    work = partial(transport.assemble_gas, radiation, gas, matter, dt=_DT, spacing=(_SPACING,) * 3, axes=_AXES)
    assembly = work()
    if assembly.bad_zone >= 0 or not np.isfinite(assembly.bands).all():
        raise KernelError("transport did not assemble on a state that is sound; run the tests of the transport")
    return work, assembly, radiation


def relax_work() -> Work:
    """``PASSES`` colour passes over a tile, each of which updates every second zone."""
    _, assembly, radiation = assemble_work()
    return partial(
        transport.relax,
        radiation,
        assembly.system,
        axes=_AXES,
        first_colour=0,
        passes=PASSES,
        origin_parity=0,
    )


def transport_figures(effort: Effort) -> dict[str, float]:
    """Nanoseconds a zone to assemble, and to relax once; bytes a zone that relaxing reads."""
    samples = take_turns({"assemble": assemble_work()[0], "relax": relax_work()}, effort)
    zones = SIDE**2
    return {
        "side": SIDE,
        "groups": GROUPS,
        "assemble_ns_per_zone": 1e9 * min(samples["assemble"]) / zones,
        "relax_ns_per_zone": 1e9 * min(samples["relax"]) / (zones * PASSES / 2),
        "relax_bytes_per_zone": 8 * panel_rows(GROUPS, len(_AXES)),
    }
