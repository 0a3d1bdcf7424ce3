"""Toy problems: cheap steps on a few zones that use every kind of declaration, and kernels that misbehave.

The arithmetic is invented and means nothing. Every kernel gives a zone the same bits whatever tile the
zone lies in, so that answers may be compared across tilings to the last bit.
"""

from __future__ import annotations

import itertools
import time
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Edge, Mesh, Triple
from breakstep.mesh.tiling import Tile
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Item, Repeat, Splitting, lie
from breakstep.steps.step import Array, Call, Read, Step

Arrays = Mapping[str, Array]
TOLERANCE = 1e-3  # reached after 3 to 20 iterations on these meshes


def halo(dimensions: int, width: int = 1) -> Triple:
    """The same width along every axis that exists."""
    widths = [width if axis < dimensions else 0 for axis in range(3)]
    return (widths[0], widths[1], widths[2])


def moved(padded: Array, widths: Triple, offset: Triple) -> Array:
    """The zones of a padded array that lie ``offset`` away from its own zones."""
    cuts = [slice(w + o, n - w + o) for n, w, o in zip(padded.shape[1:], widths, offset, strict=True)]
    return padded[(slice(None), *cuts)]


def axis_offset(axis: int, distance: int) -> Triple:
    """An offset along one axis."""
    return (distance * (axis == 0), distance * (axis == 1), distance * (axis == 2))


def widths_of(call: Call, width: int = 1) -> Triple:
    """Halo widths along the axes that exist."""
    return halo(sum(call.active), width)


def smooth(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Average ``u`` with its neighbours along each axis."""
    padded, widths = arrays["u"], widths_of(call)
    total = 0.5 * moved(padded, widths, (0, 0, 0))
    for axis in range(sum(call.active)):
        total = total + 0.0625 * moved(padded, widths, axis_offset(axis, -1))
        total = total + 0.0825 * moved(padded, widths, axis_offset(axis, 1))
    return {"u": total}


def blur(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Average ``u`` over the whole box of neighbours, diagonal ones included."""
    padded, widths = arrays["u"], widths_of(call)
    total = np.zeros((1, *call.shape))
    along_x, along_y, along_z = (range(-w, w + 1) for w in widths)
    for weight, offset in enumerate(itertools.product(along_x, along_y, along_z), start=1):
        total = total + weight / (1 + weight * weight) * moved(padded, widths, offset)
    return {"u": total / 3.0}


def drift(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Shift ``w`` along x by a stencil of three zones to one side, two to the other."""
    padded, widths = arrays["w"], (3, 0, 0)
    total = 0.25 * moved(padded, widths, (0, 0, 0))
    for distance in (-3, -1, 2):
        total = total + 0.2 * moved(padded, widths, axis_offset(0, distance))
    call.count("zones", int(np.prod(call.shape)))
    return {"w": total}


def grow(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Add dt times a component of ``w`` to ``u``; local."""
    return {"u": arrays["u"] + call.dt * arrays["w"][:1]}


def trade(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Let ``u`` and ``w`` change each other; local, two writes."""
    mean = 0.5 * (arrays["u"] + arrays["w"][1:])
    return {"u": 0.9 * arrays["u"] + 0.1 * mean, "w": 0.8 * arrays["w"] + 0.1 * np.abs(mean)}


def relax(arrays: Arrays, call: Call) -> dict[str, Array]:
    """One Jacobi pass of ``v`` towards ``u`` and its own neighbours, and how much it changed."""
    padded, widths, dimensions = arrays["v"], widths_of(call), sum(call.active)
    total = 1.0 * arrays["u"]
    for axis in range(dimensions):
        for distance in (-1, 1):
            total = total + 0.25 / dimensions * moved(padded, widths, axis_offset(axis, distance))
    new = total / 1.6
    return {"v": new, "change": np.abs(new - moved(padded, widths, (0, 0, 0)))}


def settle(arrays: Arrays, call: Call) -> dict[str, Array]:
    """A second pass of the same repeat, local, that undoes a little of the first."""
    return {"v": 0.999 * arrays["v"]}


def rate(arrays: Arrays, call: Call) -> Array:
    """A tile's contribution to dt."""
    return np.array([np.abs(arrays["u"]).max()])


def next_step(combined: Array, previous: Array | None) -> Array:
    """(dt, time at the beginning of the cycle that uses it)."""
    start = 0.0 if previous is None else previous[1] + previous[0]
    return np.array([0.1 / (1.0 + combined[0]), start])


def largest_change(arrays: Arrays, call: Call) -> Array:
    """A tile's contribution to the residual."""
    return np.array([arrays["change"].max()])


def as_it_is(combined: Array, previous: Array | None) -> Array:
    """The combined vector is the result."""
    return combined


def is_small(residual: Array) -> bool:
    """Whether the repeat may stop."""
    return bool(residual[0] < TOLERANCE)


def waves(tile: Tile, mesh: Mesh) -> dict[str, Array]:
    """An initial state that differs from zone to zone; a pure function of the zone's place."""
    axes = [np.arange(o, o + n, dtype=np.float64) for o, n in zip(tile.origin, tile.shape, strict=True)]
    x, y, z = np.meshgrid(*axes, indexing="ij")
    u = np.sin(0.7 * x + 0.3 * y * y + 0.2 * z)[None]
    w = np.stack([np.cos(0.5 * x - 0.4 * y + z), 0.1 * x + 0.05 * y])
    return {"u": u, "w": w, "v": 0.0 * u, "change": 0.0 * u}


FIELDS = (
    Field("u", ("u",), fixed={(axis, side): (0.25 + side,) for axis in range(3) for side in (0, 1)}),
    Field(
        "w",
        ("along", "level"),
        normal={0: (0,)},
        fixed={(axis, side): (0.5, 1.5 - side) for axis in range(3) for side in (0, 1)},
    ),
    Field("v", ("v",), fixed={(axis, side): (0.125,) for axis in range(3) for side in (0, 1)}),
    Field("change", ("change",)),
)


@dataclass(frozen=True)
class Toy:
    """A choice of toy: which mesh, which lags, whether it repeats and reduces.

    Attributes
    ----------
    two_orders : bool
        Whether even and odd cycles run the steps in different orders.
    two_passes : bool
        Whether the repeat's body has two steps.
    """

    shape: tuple[int, ...] = (12, 9)
    edges: tuple[Edge, ...] = (Edge.PERIODIC, Edge.REFLECTING)
    dt_lag: int = 0
    residual_lag: int = 0
    cycles: int = 3
    repeats: bool = True
    two_orders: bool = False
    two_passes: bool = False
    at_most: int = 60

    def problem(self) -> Problem:
        """The problem as declared to Breakstep."""
        return Problem(
            name="toy",
            title="an invented problem",
            mesh=Mesh(self.shape, (1.0,) * len(self.shape), tuple((e, e) for e in self.edges[: len(self.shape)])),
            fields=FIELDS,
            splitting=self.splitting(),
            initial=waves,
            cycles=self.cycles,
        )

    def splitting(self) -> Splitting:
        """Steps, repeat and reductions."""
        forward = self.steps()
        orders = [forward, [forward[2], forward[0], forward[1], *forward[3:]]] if self.two_orders else [forward]
        return Splitting(tuple(tuple(order) for order in orders), (dt_reduction(self.dt_lag),))

    def steps(self) -> list[Item]:
        """The steps of a cycle in order."""
        width = halo(len(self.shape))
        steps: list[Item] = [
            Step("smooth", smooth, (Read("u", width),), ("u",)),
            Step("drift", drift, (Read("w", (3, 0, 0)),), ("w",)),
            Step("grow", grow, (Read("u"), Read("w")), ("u",), uses=("dt",)),
            Step("trade", trade, (Read("u"), Read("w")), ("u", "w")),
            Step("blur", blur, (Read("u", width, corners=True),), ("u",)),
        ]
        if self.repeats:
            passes = [Step("relax", relax, (Read("v", width), Read("u")), ("v", "change"))]
            if self.two_passes:
                passes.append(Step("settle", settle, (Read("v"),), ("v",)))
            residual = Reduction(
                "residual", largest_change, (Read("change"),), Combine.MAX, as_it_is, self.residual_lag
            )
            steps.append(Repeat("solve", tuple(passes), residual, is_small, self.at_most))
        return steps


def dt_reduction(lag: int = 0) -> Reduction:
    """The toy's time step."""
    return Reduction("dt", rate, (Read("u"),), Combine.MAX, next_step, lag)


@dataclass(frozen=True)
class Delayed:
    """A kernel that sleeps before it works: long on one tile, which moves by ``speed`` tiles a cycle."""

    kernel: object
    seconds: float
    hot_tile: int = 0
    hot_factor: float = 1.0
    speed: int = 0

    def __call__(self, arrays: Arrays, call: Call) -> Mapping[str, Array]:
        hot = call.tile == self.hot_tile + self.speed * call.cycle
        time.sleep(self.seconds * (self.hot_factor if hot else 1.0))
        return self.kernel(arrays, call)  # type: ignore[operator, no-any-return]


@dataclass(frozen=True)
class Scripted:
    """A residual that follows a script, whatever the arrays hold."""

    residuals: tuple[float, ...]

    def __call__(self, arrays: Arrays, call: Call) -> Array:
        return np.array([self.residuals[min(call.iteration, len(self.residuals) - 1)]])


def rising_problem(lag: int) -> Problem:
    """A repeat whose residual is small at its third iteration, and large again at the two behind it."""
    problem = Toy((12,)).problem()
    *steps, solve = problem.splitting.orders[0]
    assert isinstance(solve, Repeat)
    script = Scripted((1.0, 1.0, 0.0, 1.0, 1.0, 0.0))
    until = Reduction("residual", script, (Read("change"),), Combine.MAX, as_it_is, lag)
    return replace(problem, splitting=lie([*steps, replace(solve, until=until)], [dt_reduction()]))


@dataclass(frozen=True)
class Faulty:
    """``grow``, but at one tile and cycle it misbehaves in the way named."""

    fault: str
    tile: int = 1
    cycle: int = 1

    def __call__(self, arrays: Arrays, call: Call) -> object:
        made: dict[str, Array] = {"u": arrays["u"] + 0.01}
        if (call.tile, call.cycle) != (self.tile, self.cycle):
            return made
        return getattr(self, self.fault)(arrays, made)

    def nan(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """One zone is not finite."""
        made["u"][(0, 2) + (0,) * (made["u"].ndim - 2)] = np.nan
        return made

    def infinite(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """One zone is infinite."""
        made["u"][0, 0, 0, 0] = -np.inf
        return made

    def misshapen(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """The array has one zone too few."""
        return {"u": made["u"][:, 1:]}

    def single(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """The array is single precision."""
        return {"u": made["u"].astype(np.float32)}

    def missing(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """A declared write is not there."""
        return {}

    def extra(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """A write that was not declared."""
        return {**made, "w": made["u"]}

    def nothing(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """The return statement was forgotten."""
        return None

    def mutates(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """The input is changed in place."""
        arrays["u"][:] += 1.0
        return made

    def divides(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """A plain Python error."""
        return 1 // (len(made) - 1)

    def interrupts(self, arrays: Arrays, made: dict[str, Array]) -> object:
        """The user presses Ctrl-C."""
        raise KeyboardInterrupt


def faulty_problem(fault: str, tile: int = 1, cycle: int = 1, cycles: int = 3) -> Problem:
    """A problem whose second step misbehaves once."""
    steps = (
        Step("smooth", smooth, (Read("u", (1, 0, 0)),), ("u",)),
        Step("broken", Faulty(fault, tile, cycle), (Read("u"),), ("u",), uses=("dt",)),  # type: ignore[arg-type]
    )
    mesh = Mesh((12,), (1.0,), ((Edge.PERIODIC, Edge.PERIODIC),))
    return Problem("faulty", "an invented problem", mesh, FIELDS, Splitting((steps,), (dt_reduction(),)), waves, cycles)
