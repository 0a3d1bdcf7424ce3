"""Steps from a C library through ctypes: false declarations first, then true ones."""

from __future__ import annotations

import ctypes
import subprocess
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np

from breakstep.steps.step import Array, Call, Read
from tests.audit_cases.common import XY, Arrays, Case, X

SOURCE = Path(__file__).with_name("cases.c")
U, W = Read("u"), Read("w")


def build(folder: Path) -> Path:
    """Compile the library with the system's gcc."""
    library = folder / "libcases.so"
    subprocess.run(["gcc", "-O2", "-shared", "-fPIC", "-o", str(library), str(SOURCE)], check=True)
    return library


@cache
def _loaded(library: str) -> ctypes.CDLL:
    return ctypes.CDLL(library)


@dataclass(frozen=True)
class Compiled:
    """A routine of the library as a kernel; ctypes releases the interpreter lock."""

    library: str
    routine: str
    out: str
    second: str = ""
    halo: tuple[int, int, int] = (0, 0, 0)

    def __call__(self, arrays: Arrays, call: Call) -> dict[str, Array]:
        function = getattr(_loaded(self.library), self.routine)
        function.restype = None
        made = np.empty((1, *call.shape))
        second = arrays[self.second] if self.second else arrays["u"]
        pointers = [ctypes.c_void_p(array.ctypes.data) for array in (arrays["u"], second, made)]
        numbers = (*call.shape[:2], *self.halo[:2], call.tile)
        function(*pointers, *(ctypes.c_long(number) for number in numbers))
        return {self.out: made}


TABLE: list[tuple[str, tuple[Read, ...], str, tuple[str, ...]]] = [
    ("product", (U,), "w", ("undeclared field",)),
    ("two_away", (Read("u", X),), "", ("undeclared halo", "outside memory")),
    ("past_the_end", (U,), "", ("outside memory",)),
    ("looks_before", (U,), "", ("outside memory",)),
    ("static_scratch", (U,), "", ("hidden state", "threads")),
    ("static_counter", (U,), "", ("hidden state",)),
    ("static_last", (U,), "", ("hidden state",)),
    ("static_first", (U,), "", ("call order",)),
    ("sets_common", (U,), "", ("hidden state",)),
    ("uses_common", (U,), "", ("call order",)),
    ("in_place", (U,), "", ("changed input",)),
    ("in_place_undone", (U,), "", ("changed input",)),
    ("ghost_zones_set", (Read("u", X),), "", ("changed input",)),
    ("other_array_set", (U,), "w", ("changed input",)),
    ("overrun", (U,), "", ("outside memory",)),
    ("underrun", (U,), "", ("outside memory",)),
    ("input_overrun", (U,), "", ("outside memory",)),
    ("partly", (U,), "", ("uninitialised",)),
    ("unset_work", (U,), "", ("uninitialised",)),
    ("diagonal", (Read("u", XY),), "", ("undeclared corners",)),
    ("by_tile", (U,), "", ("tile number",)),
    ("by_local_place", (U,), "", ("tiling",)),
    ("wrong_strides", (U,), "", ("undeclared halo", "tiling")),
    ("draws", (U,), "", ("not repeatable", "hidden state")),
    ("three", (Read("u", XY),), "", ("unused halo",)),
    ("three", (U,), "", ("outside memory", "undeclared halo")),
    ("five", (Read("u", XY, corners=True),), "", ("unused corners",)),
    ("product", (U, W), "", ("unused read",)),
    ("dies", (U,), "", ("crash",)),
    ("flushes", (U,), "", ("side effect",)),
    ("rounds_up", (U,), "", ("side effect",)),
    ("far_overrun", (U,), "", ("outside memory",)),
    ("far_read", (U,), "", ("outside memory",)),
    ("heap_state", (U,), "", ("hidden state", "not repeatable")),
    ("heap_scratch", (U,), "", ("hidden state", "threads")),
    ("in_place_when_hot", (U,), "", ("changed input",)),
    ("partly_when_hot", (U,), "", ("uninitialised",)),
    ("memo", (U,), "", ("hidden state", "call order")),
    ("thread_local_state", (U,), "", ("hidden state", "not repeatable")),
    ("three", (Read("u", X),), "", ()),
    ("five", (Read("u", XY),), "", ()),
    ("product", (U, W), "w", ()),
    ("with_work", (U,), "", ()),
]


def cases(library: Path) -> list[Case]:
    """A case for each row of the table."""
    made = []
    for number, (routine, reads, second, kinds) in enumerate(TABLE):
        name = f"c{number}_{routine}"
        kernel = Compiled(str(library), routine, f"of_{name}", second, reads[0].halo)
        made.append(Case(name, kernel, reads, kinds))
    return made
