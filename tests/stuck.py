"""A file of a user's whose kernel does not return for one tile in one cycle, in several ways."""

STUCK = '''
import ctypes
import time

import numpy as np
from breakstep import Edge, Field, Mesh, Problem, Read, Setup, Step, lie


def linger(how, seconds):
    """Sleep as Python does, run in Python, or wait in C with and without the interpreter's lock."""
    if how == "sleep":
        time.sleep(seconds)
    while how == "python":
        pass
    if how == "released":
        ctypes.CDLL(None).sleep(seconds)
    if how == "held":
        ctypes.PyDLL(None).sleep(seconds)


class Smooth:
    def __init__(self, how, seconds, tile, cycle):
        self.how, self.seconds, self.tile, self.cycle = how, seconds, tile, cycle

    def smooth(self, u, call):
        if (call.tile, call.cycle) == (self.tile, self.cycle):
            linger(self.how, self.seconds)
        return {"u": 0.5 * u[:, 1:-1] + 0.25 * (u[:, :-2] + u[:, 2:])}

    def __call__(self, arrays, call):
        return self.smooth(arrays["u"], call)


def start(tile, mesh):
    return {"u": np.sin(np.arange(tile.shape[0]) + 1.0 * tile.origin[0]).reshape(1, -1, 1, 1)}


def setup(how="python", seconds=600, tile=1, cycle=2):
    mesh = Mesh((12,), (1.0,), ((Edge.PERIODIC, Edge.PERIODIC),))
    kernel = Smooth(how, seconds, tile, cycle)
    step = Step("smooth", kernel, (Read("u", (1, 0, 0)),), ("u",))
    return Setup(Problem("stuck", "", mesh, (Field("u", ("u",)),), lie([step]), start, 5), (4,))
'''
