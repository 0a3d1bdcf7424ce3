"""A step: one physics operator, as a kernel with everything it reads and writes declared.

Built-in physics and users' own steps are declared through this module alone.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from operator import index
from typing import SupportsIndex, TypeAlias

import numpy as np
from numpy.typing import NDArray

from breakstep.errors import CourantError, DeclarationError
from breakstep.mesh.mesh import Triple
from breakstep.mesh.shown import facts, listed

Array: TypeAlias = NDArray[np.float64]


@dataclass(frozen=True)
class Read:
    """A field that a step reads, and how far beyond its own zones.

    Parameters
    ----------
    field : str
        Name of the field.
    halo : tuple of int
        Ghost zones read along x, y, z.
    corners : bool
        Whether ghost zones diagonal to the tile are read; they hold NaN otherwise.
    """

    field: str
    halo: Triple = (0, 0, 0)
    corners: bool = False

    def __post_init__(self) -> None:
        if isinstance(
            self.halo, Sequence | np.ndarray
        ):  # plans are kept by read: what stands for the same read must be the same
            halo = tuple(index(w) if isinstance(w, SupportsIndex) else w for w in self.halo)
            object.__setattr__(self, "halo", halo)

    @property
    def is_local(self) -> bool:
        """Whether the step reads its own zones only."""
        return not any(self.halo)

    def __str__(self) -> str:
        halo = "" if self.is_local else f" with halo {self.halo}{' and corners' if self.corners else ''}"
        return f"{self.field}{halo}"


@dataclass
class Call:
    """What a kernel is told about the one call it serves.

    Attributes
    ----------
    step, cycle, iteration : str, int, int
        Which call this is; ``iteration`` is -1 outside repeats.
    tile : int
    origin, shape : tuple of int
        First zone and extent of the tile.
    widths : tuple of float
        Zone widths [cm]; 1 along absent axes.
    active : tuple of bool
        Which axes exist.
    values : mapping of str to ndarray
        Results of the reductions that the step declared in ``uses``.
    fraction : float
        Share of the cycle's time step that this call advances (1/2 for the halves of a Strang splitting).
    stands_for : int
        Set by a kernel that only waits: the processor time for which its wait stands [ns]; -1 for a real kernel.
    """

    step: str
    cycle: int
    iteration: int
    tile: int
    origin: Triple
    shape: Triple
    widths: tuple[float, float, float]
    active: tuple[bool, bool, bool]
    values: Mapping[str, Array]
    fraction: float = 1.0
    stands_for: int = -1
    counters: dict[str, int] = field(default_factory=dict)

    @property
    def dt(self) -> float:
        """Time this call advances [s]: the first entry of reduction ``dt`` times ``fraction``."""
        try:
            first = float(self.values["dt"][0])
        except KeyError:
            raise DeclarationError(
                f'{self.where()}: it asks for the time step without declaring so: give the step uses=("dt",), and'
                " the splitting a reduction called dt"
            ) from None
        return first * self.fraction

    def require_time_step(self, limit: float, where: str = "") -> None:
        """Refuse a time step that the state at hand does not allow; to be called by every step that has a limit.

        With a lag, dt was measured on an earlier state than the one that it is applied to. The built-in sweeps check
        theirs; nobody else can check yours.

        Parameters
        ----------
        limit : float
            The largest time this call may advance the state that it was given [s]; NaN allows none.
        where : str
            What sets the limit and where, in words, such as ``"conduction in zone (3, 0, 0)"``.

        Raises
        ------
        CourantError
            :attr:`dt` is larger.
        """
        if not self.dt <= limit:
            cause = f" ({where})" if where else ""
            raise self.courant_error(
                f"is more than the {limit:.4g} s that the state it is applied to allows{cause}", limit
            )

    def courant_error(self, trouble: str, limit: float, **details: float) -> CourantError:
        """The error for a time step that is too large: which call, what is wrong with it, and what to do."""
        return CourantError(
            f"{self.where()}: the time step {self.dt:.4g} s {trouble}; lower the CFL factor, the growth of the time"
            " step or the lag of dt",
            step=self.step,
            tile=self.tile,
            cycle=self.cycle,
            iteration=self.iteration,
            dt=self.dt,
            limit=float(limit),
            **details,
        )

    def count(self, name: str, amount: int) -> None:
        """Add to a work counter, which the profile records."""
        self.counters[name] = self.counters.get(name, 0) + int(amount)

    def where(self) -> str:
        """The call in words, for error messages."""
        iteration = f", iteration {self.iteration}" if self.iteration >= 0 else ""
        return f"step {self.step}, tile {self.tile}, cycle {self.cycle}{iteration}"


Kernel: TypeAlias = Callable[[Mapping[str, Array], Call], Mapping[str, Array]]


@dataclass(frozen=True)
class Step:
    """One operator of the splitting.

    Parameters
    ----------
    name : str
        Appears in every account; letters, digits and underscores.
    kernel : callable
        ``kernel(arrays, call) -> new arrays``: gets each declared read as a write-protected array of shape
        (components, nx + 2 hx, ny + 2 hy, nz + 2 hz), returns a new array of shape (components, nx, ny, nz)
        for each declared write. Must depend on nothing else.
    reads, writes : tuple of Read, tuple of str
        Everything it uses and makes.
    uses : tuple of str
        Reductions whose results it needs.
    fraction : float
        Share of the time step; set by :func:`breakstep.steps.splitting.strang`.
    """

    name: str
    kernel: Kernel
    reads: tuple[Read, ...]
    writes: tuple[str, ...]
    uses: tuple[str, ...] = ()
    fraction: float = 1.0

    def __post_init__(self) -> None:
        check_name("step", self.name)
        if not self.writes:
            raise DeclarationError(f"step {self.name!r} declares no writes, so nothing would ever use it")
        check_reads(f"step {self.name!r}", self.reads)
        if len(set(self.writes)) < len(self.writes):
            raise DeclarationError(f"step {self.name!r} declares the same write twice")

    @property
    def is_local(self) -> bool:
        """Whether it reads no ghost zones at all."""
        return all(read.is_local for read in self.reads)

    def _repr_html_(self) -> str:
        """What it declares, for notebooks."""
        rows = [
            ("kernel", getattr(self.kernel, "__qualname__", type(self.kernel).__name__)),
            ("reads", listed(self.reads)),
            ("writes", listed(self.writes)),
            ("uses", listed(self.uses)),
            ("share of dt", f"{self.fraction:g}"),
        ]
        return facts(f"Step {self.name}", rows)


def check_name(what: str, name: str) -> None:
    """Refuse names that could not stand in tables, keys and file names."""
    if not name.isidentifier():
        raise DeclarationError(f"the name of a {what} must be an identifier, not {name!r}")


def check_reads(owner: str, reads: tuple[Read, ...]) -> None:
    """Refuse repeated fields and halos that are not three whole numbers from 0 up."""
    fields = [read.field for read in reads]
    for name in sorted({name for name in fields if fields.count(name) > 1}):
        raise DeclarationError(f"{owner} declares its read of field {name!r} twice; give the wider halo once")
    for read in reads:
        if (
            not isinstance(read.halo, tuple)
            or len(read.halo) != 3
            or any(not isinstance(w, int) or w < 0 for w in read.halo)
        ):
            raise DeclarationError(
                f"{owner} reads field {read.field!r} with halo {read.halo!r}; expected three whole numbers, 0 or more"
            )
