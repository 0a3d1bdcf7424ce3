"""Steps compiled by Numba: false declarations first, then true ones."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from breakstep.kernels.compiled import compiled
from breakstep.steps.step import Array, Call, Read
from tests.audit_cases.common import X2, XY, Arrays, Case, X

U, W = Read("u"), Read("w")


@dataclass(frozen=True)
class Jit:
    """A compiled function as a kernel: ``function(u, w, tile, origin_x, nx, ny) -> array``."""

    name: str
    function_name: str
    second: str = ""

    def __call__(self, arrays: Arrays, call: Call) -> dict[str, Array]:
        function = FUNCTIONS[self.function_name]
        second = arrays[self.second] if self.second else arrays["u"]
        return {f"of_{self.name}": function(arrays["u"], second, call.tile, call.origin[0], *call.shape[:2])}


@compiled
def two_back(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    """Reads two zones back with one ghost zone: the first row wraps to the end of the array."""
    made = np.zeros((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i + 1, j, 0] - u[0, i - 1, j, 0]
    return made


@compiled
def one_beyond(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    """Reads a zone past the array's last row."""
    made = np.zeros((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i, j, 0] + 0.5 * u[0, i + 1, j, 0]
    return made


@compiled
def beyond_unused(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    """Looks past the array, and uses what it finds in a comparison that never holds."""
    made = np.zeros((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i, j, 0]
            if u[0, i + 2, j, 0] > 1e200:
                made[0, i, j, 0] = 0.0
    return made


@compiled
def diagonal(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    made = np.zeros((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i + 2, j + 2, 0] - u[0, i, j, 0]
    return made


@compiled
def narrow(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    """Declared with two ghost zones, uses one."""
    made = np.zeros((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i + 3, j, 0] - u[0, i + 1, j, 0]
    return made


@compiled
def local(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    """Uses its first argument's own zones."""
    made = np.zeros((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = 2.0 * u[0, i, j, 0]
    return made


@compiled
def both(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    return u[:1] * w[:1]


@compiled
def overruns(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    """Writes one zone past the last of what it returns."""
    made = np.zeros(nx * ny + 64)[: nx * ny]
    for i in range(nx * ny + 1):
        made[i] = u.flat[min(i, nx * ny - 1)]
    return made.copy().reshape((1, nx, ny, 1))


@compiled
def half(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    made = np.empty((1, nx, ny, 1))
    for i in range(nx - 1):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i, j, 0]
    return made


@compiled
def by_tile(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    return u * (1.0 + 0.01 * (tile % 3))


@compiled
def by_local_place(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    made = np.zeros((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i, j, 0] * (1.0 + i)
    return made


@compiled
def other_axis(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    """Declared along x, differences along y, clamped at the tile's edge."""
    made = np.zeros((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i + 1, min(j + 1, ny - 1), 0] - u[0, i + 1, max(j - 1, 0), 0]
    return made


@compiled
def random_numbers(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    return u + 1e-6 * np.random.random()


@compiled
def doubles_in_place(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    for i in range(nx):
        u[0, i, 0, 0] *= 2.0
    return u.copy()


@compiled
def three(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    made = np.empty((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i + 2, j, 0] - 2.0 * u[0, i + 1, j, 0] + u[0, i, j, 0]
    return made


@compiled
def of_place(u: Array, w: Array, tile: int, x: int, nx: int, ny: int) -> Array:
    made = np.empty((1, nx, ny, 1))
    for i in range(nx):
        for j in range(ny):
            made[0, i, j, 0] = u[0, i, j, 0] * (1.0 + 0.1 * (x + i))
    return made


FUNCTIONS = {
    function.__name__: function
    for function in (
        two_back,
        one_beyond,
        beyond_unused,
        diagonal,
        narrow,
        local,
        both,
        overruns,
        half,
        by_tile,
        by_local_place,
        other_axis,
        random_numbers,
        doubles_in_place,
        three,
        of_place,
    )
}


def _case(name: str, function: str, reads: tuple[Read, ...], *kinds: str, second: str = "") -> Case:
    return Case(name, Jit(name, function, second), reads, kinds)


CASES = [
    _case("n_other_field", "both", (U,), "undeclared field", second="w"),
    _case("n_two_back", "two_back", (Read("u", X),), "undeclared halo", "outside memory"),
    _case("n_one_beyond", "one_beyond", (U,), "outside memory"),
    _case("n_beyond_unused", "beyond_unused", (U,), "outside memory"),
    _case("n_diagonal", "diagonal", (Read("u", XY),), "undeclared corners"),
    _case("n_narrow", "narrow", (Read("u", X2),), "unused halo"),
    _case("n_unused_field", "local", (U, W), "unused read", second="w"),
    _case("n_overruns", "overruns", (U,), "outside memory"),
    _case("n_half", "half", (U,), "uninitialised"),
    _case("n_by_tile", "by_tile", (U,), "tile number"),
    _case("n_by_local_place", "by_local_place", (U,), "tiling"),
    _case("n_other_axis", "other_axis", (Read("u", X),), "undeclared halo"),
    _case("n_random", "random_numbers", (U,), "not repeatable"),
    _case("n_in_place", "doubles_in_place", (U,), "changed input"),
    _case("n_three", "three", (Read("u", X),)),
    _case("n_of_place", "of_place", (U,)),
    _case("n_both", "both", (U, W), second="w"),
]
