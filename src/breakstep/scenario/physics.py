"""What the tables of a scenario may hold: the gas, and the steps that act on it.

A step takes part in the run when its table is there. Every key has its type, its bounds and one sentence
on what it is; rules that tie keys together stand in ``rules``.
"""

from __future__ import annotations

from functools import partial
from typing import Annotated, Literal

from pydantic import AfterValidator, BeforeValidator, Field

from breakstep.kernels.burning.network import PACKAGED_NETWORKS
from breakstep.scenario.sections import NotNegative, Section, Temperature, Word, known_word, lists

Share = Annotated[float, Field(ge=0.0, le=1.0)]
Weight = Annotated[float, Field(ge=1e-6, le=1e6)]
Charge = Annotated[float, Field(ge=0.0, le=1e6)]
PhotonEnergy = Annotated[float, Field(ge=1e-9, le=1e9)]
OpacityValue = Annotated[float, Field(ge=0.0, le=1e30)]
Exponent = Annotated[float, Field(ge=-10.0, le=10.0)]
NetworkWord = Annotated[str, AfterValidator(partial(known_word, known=PACKAGED_NETWORKS))]


class GammaLawSection(Section):
    """``[eos]`` of an ideal gas with a constant ratio of specific heats."""

    kind: Literal["gamma_law"] = Field(description="gamma_law or stellar")
    gamma: Annotated[float, Field(ge=1.001, le=10.0)] = Field(default=5.0 / 3.0, description="ratio of specific heats")
    mean_molecular_weight: Weight = Field(default=1.0, description="grams a mole of particles")


class StellarSection(Section):
    """``[eos]`` of ideal ions, degenerate electrons and perhaps black-body radiation."""

    kind: Literal["stellar"] = Field(description="gamma_law or stellar")
    radiation: bool = Field(
        default=True, description="whether pressure and energy include radiation at the matter's temperature"
    )


EosSection = GammaLawSection | StellarSection


class HydroSection(Section):
    """``[hydro]``: directional sweeps along every axis. It has no keys of its own."""


class OpacitySection(Section):
    """``[transport.opacity]``: the invented power-law opacity."""

    absorption: OpacityValue = Field(
        default=1.0, description="absorption at the reference temperature and photon energy [cm^2/g]"
    )
    reference_temperature: Temperature = Field(default=1e8, description="reference temperature [K]")
    reference_photon_energy: PhotonEnergy = Field(default=25.0, description="reference photon energy [keV]")
    temperature_exponent: Exponent = Field(default=1.0, description="absorption falls with this power of temperature")
    photon_exponent: Exponent = Field(default=1.0, description="absorption falls with this power of photon energy")
    scattering: OpacityValue = Field(default=0.2, description="grey scattering [cm^2/g]")
    inelastic: Share = Field(
        default=0.1, description="largest share of a group's scattering that moves photons to other groups"
    )
    broadening: Annotated[float, Field(ge=0.001, le=10.0)] = Field(
        default=0.7, description="width of that move, in the logarithm of the photon energy"
    )


class TransportSection(Section):
    """``[transport]``: implicit multi-group flux-limited diffusion, solved iteratively across tiles."""

    groups: Annotated[int, Field(ge=1, le=256)] = Field(default=16, description="photon groups")
    lowest_photon_energy: PhotonEnergy = Field(default=1.0, description="low end of the nominal photon energies [keV]")
    highest_photon_energy: PhotonEnergy = Field(
        default=3000.0, description="high end of the nominal photon energies [keV]"
    )
    opacity: OpacitySection = Field(default=OpacitySection(), description="the invented opacity")
    tolerance: Annotated[float, Field(gt=0.0, lt=1.0)] = Field(
        default=1e-8,
        description="largest correction at which the solve stops, relative to the largest energy density",
    )
    at_most: Annotated[int, Field(ge=1, le=100_000)] = Field(
        default=200, description="iterations after which it gives up"
    )
    lag: Annotated[int, Field(ge=0, le=10)] = Field(
        default=0, description="iterations by which the residual is used late"
    )
    sweeps_per_exchange: Annotated[int, Field(ge=1, le=100)] = Field(
        default=4, description="colour passes over a tile between two exchanges of halos"
    )
    omega: Annotated[float, Field(gt=0.0, lt=2.0)] = Field(default=1.2, description="over-relaxation factor")
    block_solver: Literal["dense"] = Field(default="dense", description="how the block of a zone is solved")


class BurningSection(Section):
    """``[burning]``: a reaction network integrated zone by zone."""

    network: NetworkWord = Field(default="alpha13", description="which packaged reaction network")
    relative_tolerance: Annotated[float, Field(ge=1e-12, le=0.1)] = Field(
        default=1e-4, description="relative error allowed in a sub-step"
    )
    absolute_tolerance: Annotated[float, Field(gt=0.0, le=0.1)] = Field(
        default=1e-8, description="error in mass fraction allowed in a sub-step"
    )
    sub_step_limit: Annotated[int, Field(ge=1, le=10_000_000)] = Field(
        default=5000, description="sub-steps of one zone after which the run stops"
    )
    cutoff_temperature: NotNegative = Field(default=1e8, description="zones colder than this do not burn [K]")


class SpeciesSection(Section):
    """``[species]``: nuclei that are carried along in a run without burning; listed, or a network's."""

    network: NetworkWord | None = Field(default=None, description="the network whose species they are")
    names: Annotated[tuple[Word, ...], BeforeValidator(lists), Field(max_length=200)] = Field(
        default=(), description="names of the species"
    )
    mass_numbers: Annotated[tuple[Weight, ...], BeforeValidator(lists), Field(max_length=200)] = Field(
        default=(), description="mass number of each species"
    )
    charges: Annotated[tuple[Charge, ...], BeforeValidator(lists), Field(max_length=200)] = Field(
        default=(), description="charge of each species"
    )
