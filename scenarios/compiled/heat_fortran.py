"""A routine in Fortran that updates its block in place: ``breakstep compare scenarios/compiled/heat_fortran.py``."""

from pathlib import Path

from plate import plate, share

from breakstep import InPlace, Library


def arguments(blocks, call):
    """What ``heat_step(u, nx, ny, g, share)`` takes: the block as it lies in memory, and numbers."""
    return blocks["warmth"], call.shape[0], call.shape[1], 1, share(call)


def setup(zones=(96, 96), cycles=20):
    """Compiled once, into a cache folder; give ``Library(path)`` to use what you have compiled yourself."""
    routine = Library.build(Path(__file__).with_name("heat.f90"), "gfortran").routine("heat_step", returns="int")
    return plate("heat_fortran", InPlace(routine, arguments, ("warmth",)), zones, cycles)
