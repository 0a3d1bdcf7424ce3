"""A program of one's own: warmth spreads through a plate, and a fuel in it burns away. All figures are invented."""

import numpy as np

from breakstep import Combine, Edge, Field, Mesh, Problem, Read, Reduction, Setup, Step, compare, strang

DIFFUSIVITY, HEAT = 1.2, 900.0  # [cm^2/s], [K] for all of the fuel


def diffuse(arrays, call):
    """Explicit five-point diffusion; reads one ghost zone on each side."""
    t, dx2 = arrays["warmth"], call.widths[0] ** 2
    call.require_time_step(0.25 * dx2 / DIFFUSIVITY, "diffusion")  # dt was measured a cycle ago: lag=1 below
    inner = t[:, 1:-1, 1:-1]
    around = t[:, :-2, 1:-1] + t[:, 2:, 1:-1] + t[:, 1:-1, :-2] + t[:, 1:-1, 2:]
    return {"warmth": inner + call.dt * DIFFUSIVITY / dx2 * (around - 4.0 * inner)}


def burn(arrays, call):
    """Hot fuel turns into warmth; reads its own zones only."""
    t, fuel = arrays["warmth"], arrays["fuel"]
    burnt = fuel * np.minimum(1.0, call.dt * 40.0 * np.exp(-1500.0 / t))
    return {"warmth": t + HEAT * burnt, "fuel": fuel - burnt}


def largest_rate(arrays, call):
    """What a tile has to say about the time step: diffusion's limit, and how fast its hottest fuel burns [1/s]."""
    return np.array([4.0 * DIFFUSIVITY / call.widths[0] ** 2 + 40.0 * np.exp(-1500.0 / arrays["warmth"].max())])


def next_dt(largest, previous):
    """(dt, time) [s] from the largest rate of all tiles, and from the cycle before."""
    return np.array([0.4 / largest[0], 0.0 if previous is None else previous.sum()])


def start(tile, mesh):
    """Cold everywhere [K] but for a spark at the centre; a pure function of where the tile lies."""
    x, y, _ = np.indices(tile.shape) + 0.5 + np.reshape(tile.origin, (3, 1, 1, 1))
    spark = np.exp(-((x - 48.0) ** 2 + (y - 48.0) ** 2) / 60.0)
    return {"warmth": 300.0 + 1200.0 * spark[None], "fuel": np.ones((1, *tile.shape))}


def setup(zones=(96, 96), cycles=30):
    """The mesh, what lies on it, and the steps with all that they read and write."""
    mesh = Mesh(shape=tuple(zones), spacing=(0.1, 0.1), edges=((Edge.REFLECTING,) * 2, (Edge.REFLECTING,) * 2))
    dt = Reduction("dt", largest_rate, (Read("warmth"),), Combine.MAX, next_dt, lag=1)
    diffusing = Step("diffuse", diffuse, (Read("warmth", (1, 1, 0)),), ("warmth",), uses=("dt",))
    burning = Step("burn", burn, (Read("warmth"), Read("fuel")), ("warmth", "fuel"), uses=("dt",))
    fields = (Field("warmth", ("t",), ("K",)), Field("fuel", ("x",)))
    splitting = strang([burning, diffusing], [dt])
    return Setup(Problem("own_step", "a spark in a plate", mesh, fields, splitting, start, cycles), tile=(24, 24))


if __name__ == "__main__":
    found = compare(setup(), pairs=3)
    final = found.tasked[0].fields
    print("same bits in all runs:", found.identical)
    print("fuel burnt:", round(100.0 - 100.0 * float(final["fuel"].mean()), 3), "%")
    print("hottest zone:", round(float(final["warmth"].max()), 3), "K")
