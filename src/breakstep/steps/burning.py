"""The burning step: a network integrated in every zone, for as long as its zone needs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from breakstep.errors import KernelError
from breakstep.kernels.burning import zones as burning
from breakstep.kernels.burning.network import Network, load_network
from breakstep.steps.hydro import Gas
from breakstep.steps.step import Array, Call, Read, Step


@dataclass(frozen=True)
class Burning:
    """How to burn.

    Parameters
    ----------
    network : str or Network
        Name of a network that comes with the package, or one built by hand. A hand-built one travels whole
        with every message, and equals itself only.
    relative_tolerance, absolute_tolerance : float
        Error a sub-step may make, in temperature (relative) and mass fractions (both).
    sub_step_limit : int
        Sub-steps a zone may take; cost explodes near equilibrium, and this is where it stops.
    cutoff_temperature : float
        Zones below are left alone [K].
    """

    network: str | Network = "alpha13"
    relative_tolerance: float = 1e-4
    absolute_tolerance: float = 1e-8
    sub_step_limit: int = 5000
    cutoff_temperature: float = 1e8

    def load(self) -> Network:
        """The network; a packaged one is read once a process."""
        return load_network(self.network) if isinstance(self.network, str) else self.network


@dataclass(frozen=True)
class BurnKernel:
    """Burns every zone of a tile over the time step.

    Raises
    ------
    KernelError
        A zone reached the sub-step limit, or its state cannot be burned.
    """

    gas: Gas
    burning: Burning

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        network, how = self.burning.load(), self.burning
        eos = self.gas.arrays[0]
        limits = (how.relative_tolerance, how.absolute_tolerance, how.sub_step_limit, how.cutoff_temperature)
        gas = arrays["gas"]
        new, counters, status = burning.burn(gas, call.dt, eos, network.arrays, *limits)
        failed = burning.failure(status, gas, network.names, call.origin)
        if failed is not None:
            zone = tuple(int(s) + o for s, o in zip(status[1:], call.origin, strict=True))
            raise KernelError(
                f"{call.where()}: {failed}; lower the time step, loosen the tolerance or raise the sub-step limit",
                zone=zone,
            )
        for name, amount in zip(burning.COUNTERS, counters, strict=True):
            call.count(name, int(amount))
        return {"gas": new}


def burn(gas: Gas, how: Burning) -> Step:
    """The step ``burn``: reads its own zones only."""
    return Step("burn", BurnKernel(gas, how), (Read("gas"),), ("gas",), uses=("dt",))
