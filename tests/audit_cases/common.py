"""How a case becomes a step of a problem: each writes a field of its own, so that none spoils another's state."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from breakstep.engine.program import Program
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Edge, Mesh, Triple
from breakstep.mesh.tiling import Tile
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Item, Repeat, lie
from breakstep.steps.step import Array, Call, Kernel, Read, Step

Arrays = Mapping[str, Array]
X, Y, XY = (1, 0, 0), (0, 1, 0), (1, 1, 0)
X2 = (2, 0, 0)


@dataclass(frozen=True)
class Case:
    """A step, and the kinds of finding of which one at least must be reported; none for a correct step.

    Attributes
    ----------
    writes : tuple of str, optional
        Declared writes if they are not the one field of the case's own.
    """

    name: str
    kernel: Kernel
    reads: tuple[Read, ...] = (Read("u"),)
    kinds: tuple[str, ...] = ()
    uses: tuple[str, ...] = ()
    writes: tuple[str, ...] = ()
    per_tile: bool = False

    @property
    def step(self) -> Step:
        """The step as declared."""
        return Step(self.name, self.kernel, self.reads, self.writes or (f"of_{self.name}",), self.uses)


def evolve_u(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Smooth ``u`` a little and let it drift, so that no cycle is like another."""
    u = arrays["u"]
    own = u[:, 1:-1, 1:-1]
    return {"u": own + 0.1 * (u[:, :-2, 1:-1] - own) + 0.05 * (u[:, 1:-1, 2:] - own)}


def evolve_w(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Let ``w`` follow ``u``."""
    return {"w": 0.9 * arrays["w"] + 0.1 * arrays["u"]}


def rate(arrays: Arrays, call: Call) -> Array:
    """A tile's contribution to dt."""
    return np.array([np.abs(arrays["u"]).max()])


def other_rate(arrays: Arrays, call: Call) -> Array:
    """A second value."""
    return np.array([np.abs(arrays["w"]).max()])


def next_step(combined: Array, previous: Array | None) -> Array:
    """(dt, time)."""
    start = 0.0 if previous is None else previous[1] + previous[0]
    return np.array([0.1 / (1.0 + combined[0]), start])


def as_it_is(combined: Array, previous: Array | None) -> Array:
    """The combined vector."""
    return combined


@dataclass(frozen=True)
class Start:
    """Waves with a jump in ``u``, and zeros for what the cases make."""

    extra: tuple[tuple[str, bool], ...]

    def __call__(self, tile: Tile, mesh: Mesh) -> dict[str, Array]:
        axes = [np.arange(o, o + n, dtype=np.float64) for o, n in zip(tile.origin, tile.shape, strict=True)]
        x, y, z = np.meshgrid(*axes, indexing="ij")
        u = (np.sin(0.7 * x + 0.3 * y * y) + 2.0 * (x > 9) + 1.5)[None]
        w = np.stack([np.cos(0.5 * x - 0.4 * y + z), 1.0 + 0.1 * x + 0.05 * y])
        return {"u": u, "w": w, **{name: np.zeros_like(u) for name, per_tile in self.extra if not per_tile}}


def case_program(
    cases: list[Case],
    reductions: tuple[Reduction, ...] = (),
    repeats: tuple[Repeat, ...] = (),
    fields: tuple[tuple[str, bool], ...] = (),
) -> Program:
    """A program that evolves ``u`` and ``w`` and runs every case once a cycle.

    Parameters
    ----------
    fields : tuple of (str, bool)
        Further fields, and whether they hold one value a tile.
    """
    made = {name: case.per_tile for case in cases for name in case.step.writes}
    extra = tuple({**made, **dict(fields)}.items())
    items: list[Item] = [
        Step("evolve_u", evolve_u, (Read("u", XY),), ("u",)),
        Step("evolve_w", evolve_w, (Read("u"), Read("w")), ("w",)),
        *(case.step for case in cases),
        *repeats,
    ]
    kinds = [Field("u", ("u",)), Field("w", ("first", "second"))]
    kinds += [Field(name, (name,), scratch=per_tile, per_tile=per_tile) for name, per_tile in extra if name not in "uw"]
    dt = Reduction("dt", rate, (Read("u"),), Combine.MAX, next_step)
    other = Reduction("other", other_rate, (Read("w"),), Combine.MAX, as_it_is)
    mesh = Mesh((18, 16), (1.0, 1.0), ((Edge.PERIODIC,) * 2, (Edge.OUTFLOW,) * 2))
    splitting = lie(items, (dt, other, *reductions))
    problem = Problem("cases", "an invented problem", mesh, tuple(kinds), splitting, Start(extra), cycles=4)
    return Program(problem, (6, 8))


def own(padded: Array, halo: Triple) -> Array:
    """The zones of a padded array without its halo."""
    cuts = [slice(w, n - w) for w, n in zip(halo, padded.shape[1:], strict=True)]
    return padded[(slice(None), *cuts)]
