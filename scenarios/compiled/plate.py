"""A plate with hot spots, for the compiled examples beside this file. All figures are invented."""

import numpy as np

from breakstep import Combine, Edge, Field, Mesh, Problem, Read, Reduction, Setup, Step, lie

CONDUCTIVITY = 0.03  # [cm^2/s/K^0.5], times the root of the temperature


def share(call):
    """Conductivity times dt over the zone width squared: what the routines take [1/K^0.5]."""
    return CONDUCTIVITY * call.dt / call.widths[0] ** 2


def cool(arrays, call):
    """Radiates into the cold around; hot zones more."""
    t = arrays["warmth"]
    return {"warmth": t - call.dt * 2e-10 * (t * t * t * t - 300.0**4)}


def largest_rate(arrays, call):
    """Limit of the explicit scheme on the tile's hottest zone [1/s]."""
    return np.array([4.0 * CONDUCTIVITY * np.sqrt(arrays["warmth"].max()) / call.widths[0] ** 2])


def next_dt(largest, previous):
    """(dt, time) [s]."""
    return np.array([0.4 / largest[0], 0.0 if previous is None else previous.sum()])


def start(tile, mesh):
    """Three hot spots on a cold plate [K]."""
    x, y, _ = np.indices(tile.shape) + 0.5 + np.reshape(tile.origin, (3, 1, 1, 1))
    spots = ((20.0, 20.0, 900.0), (70.0, 30.0, 1500.0), (40.0, 75.0, 600.0))
    hot = sum(peak * np.exp(-((x - a) ** 2 + (y - b) ** 2) / 50.0) for a, b, peak in spots)
    return {"warmth": 300.0 + hot[None]}


def plate(name, conduct, zones, cycles):
    """The problem with one kernel or another for conduction, which reads one ghost zone on each side."""
    mesh = Mesh(tuple(zones), (0.1, 0.1), ((Edge.REFLECTING,) * 2,) * 2)
    dt = Reduction("dt", largest_rate, (Read("warmth"),), Combine.MAX, next_dt, lag=1)
    conducting = Step("conduct", conduct, (Read("warmth", (1, 1, 0)),), ("warmth",), uses=("dt",))
    cooling = Step("cool", cool, (Read("warmth"),), ("warmth",), uses=("dt",))
    fields = (Field("warmth", ("t",), ("K",)),)
    title = "conduction from a compiled library"
    problem = Problem(name, title, mesh, fields, lie([conducting, cooling], [dt]), start, cycles)
    return Setup(problem, tile=tuple(n // 4 for n in zones))
