"""Memory under watch: arrays in poisoned surroundings, NumPy's and the system's allocations filled with a pattern.

Everything goes through the C library and NumPy's own hook for allocators (NEP 49), so that compiled code is
watched like Python code. Knows nothing of steps.
"""

from __future__ import annotations

import contextlib
import ctypes
import mmap
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Bytes = NDArray[np.uint8]

MARGIN = 8192  # bytes of poison on each side: a few rows of a small tile
CANARY = 0xA7  # unless a probe says otherwise
_M_PERTURB = -6  # glibc: fill what malloc gives and free takes
PROT_NONE, PROT_READ, PROT_WRITE = 0, 1, 2
PAGE = mmap.PAGESIZE
GUARD = 64 * PAGE  # forbidden memory on each side of what a kernel allocates while pages are watched
_PRIVATE_ANONYMOUS = mmap.MAP_PRIVATE | mmap.MAP_ANONYMOUS

libc = ctypes.CDLL(None, use_errno=True)
libc.malloc.restype = ctypes.c_void_p
libc.malloc.argtypes = [ctypes.c_size_t]
libc.free.argtypes = [ctypes.c_void_p]
libc.free.restype = None
libc.mmap.restype = ctypes.c_void_p
libc.mmap.argtypes = [ctypes.c_void_p, ctypes.c_size_t, ctypes.c_int, ctypes.c_int, ctypes.c_int, ctypes.c_long]
libc.munmap.argtypes = [ctypes.c_void_p, ctypes.c_size_t]
libc.mprotect.argtypes = [ctypes.c_void_p, ctypes.c_size_t, ctypes.c_int]
libc.memcmp.argtypes = [ctypes.c_void_p, ctypes.c_char_p, ctypes.c_size_t]


class Guarded:
    """A copy of an array whose surroundings hold a number of our choice.

    Parameters
    ----------
    array : ndarray of float64
    poison : float
        What every double around the array holds.
    """

    def __init__(self, array: Array, poison: float) -> None:
        margin = MARGIN // 8
        self.buffer: Array = np.full(array.size + 2 * margin, poison)
        self.inner = slice(margin, margin + array.size)
        self.buffer[self.inner] = array.reshape(-1)
        self.array: Array = self.buffer[self.inner].reshape(array.shape)
        self._before: Bytes = self.buffer.view(np.uint8).copy()

    def protect(self) -> None:
        """Make NumPy refuse to write; compiled code does not ask."""
        self.buffer.flags.writeable = False
        self.array.flags.writeable = False

    def changed(self) -> NDArray[np.intp]:
        """Places of doubles that are no longer what they were, counted from the array's first."""
        now = self.buffer.view(np.uint8)
        if np.array_equal(now, self._before):
            return np.empty(0, np.intp)
        places = np.unique(np.flatnonzero(now != self._before) // 8) - self.inner.start
        return np.asarray(places, np.intp)


class Paged:
    """A copy of an array that ends, or begins, at a page that nobody may touch, and may itself be unwritable."""

    def __init__(self, array: Array, *, at_end: bool, writable: bool) -> None:
        inside = max(1, -(-array.nbytes // PAGE)) * PAGE
        self._map = mmap.mmap(-1, inside + 2 * GUARD)
        base = ctypes.addressof(ctypes.c_char.from_buffer(self._map))
        offset = GUARD + ((inside - array.nbytes) // 16 * 16 if at_end else 0)
        self.array: Array = np.frombuffer(self._map, np.float64, array.size, offset).reshape(array.shape)
        self.array[...] = array
        for start, length, allowed in (
            (base, GUARD, PROT_NONE),
            (base + GUARD + inside, GUARD, PROT_NONE),
            (base + GUARD, inside, PROT_READ | (PROT_WRITE if writable else 0)),
        ):
            if libc.mprotect(start, length, allowed) != 0:
                raise OSError(ctypes.get_errno(), "mprotect refused")


def odd_arithmetic() -> str:
    """How this thread's processor departs from the usual arithmetic, in words; "" if it does not."""
    tiny, one, three = np.array([2.0**-1030, 1.0, 3.0]).tolist()
    if tiny * one == 0.0:
        return "take the smallest numbers for 0, as -ffast-math does when a library is loaded"
    third = one / three
    return "round in another direction" if third != 0.3333333333333333 or -third != -one / three else ""


def usual_arithmetic() -> None:
    """Undo what a kernel did to the processor's arithmetic, where the C library knows how."""
    if hasattr(libc, "fesetenv"):
        libc.fesetenv(ctypes.c_void_p(-1))  # FE_DFL_ENV of glibc


def fill_heap(byte: int) -> None:
    """Make the C library fill freed memory with ``byte`` and new memory with its complement; 0 ends it."""
    if hasattr(libc, "mallopt"):
        libc.mallopt(_M_PERTURB, byte)


_MALLOC = ctypes.CFUNCTYPE(ctypes.c_void_p, ctypes.c_void_p, ctypes.c_size_t)
_CALLOC = ctypes.CFUNCTYPE(ctypes.c_void_p, ctypes.c_void_p, ctypes.c_size_t, ctypes.c_size_t)
_REALLOC = ctypes.CFUNCTYPE(ctypes.c_void_p, ctypes.c_void_p, ctypes.c_void_p, ctypes.c_size_t)
_FREE = ctypes.CFUNCTYPE(None, ctypes.c_void_p, ctypes.c_void_p, ctypes.c_size_t)


class _Allocator(ctypes.Structure):
    _fields_ = [
        ("ctx", ctypes.c_void_p), ("malloc", _MALLOC), ("calloc", _CALLOC), ("realloc", _REALLOC), ("free", _FREE),
    ]  # fmt: skip


class _Handler(ctypes.Structure):
    _fields_ = [("name", ctypes.c_char * 127), ("version", ctypes.c_uint8), ("allocator", _Allocator)]


class Watch:
    """NumPy's allocations between canaries, filled with a pattern; install once a process.

    Parameters
    ----------
    surround : int
        Bytes of canary on each side of an array; a multiple of 64.

    Attributes
    ----------
    fill, canary : int
        Bytes that new memory and its surroundings hold.
    paged : bool
        Whether new arrays end at memory that nobody may touch, instead of canaries.
    overrun : int
        Bytes beyond an array that somebody wrote, the most seen since it was last set to 0.
    """

    def __init__(self, surround: int = MARGIN) -> None:
        self.surround = surround
        self.fill = 0x00
        self.canary = CANARY
        self.paged = False
        self.overrun = 0
        self._live: dict[int, tuple[int, int]] = {}  # address -> (size, canary)
        self._canaries: dict[int, bytes] = {}
        self._mapped: dict[int, tuple[int, int]] = {}  # address -> (start and length of its pages)
        functions = _MALLOC(self._malloc), _CALLOC(self._calloc), _REALLOC(self._realloc), _FREE(self._free)
        self._handler = _Handler(b"watched", 1, _Allocator(None, *functions))
        self._functions = functions
        self._capsule = _capsule(self._handler)
        self._set = _numpy_function(304)  # PyDataMem_SetHandler, see NumPy's list of C functions

    @contextlib.contextmanager
    def on(self) -> Iterator[None]:
        """Watch what this thread allocates."""
        before = self._set(self._capsule)
        try:
            yield
        finally:
            self._set(before)

    def check(self) -> int:
        """Look at the canaries of all live arrays; bytes overrun, 0 for none."""
        for address, (size, canary) in list(self._live.items()):
            self._look(address, size, canary)
        return self.overrun

    def _look(self, address: int, size: int, canary: int) -> None:
        expected = self._expected(canary)
        # Not string_at at first: it would raise, and so lose, an error that NumPy has set before it frees.
        if not (
            libc.memcmp(address - self.surround, expected, self.surround)
            or libc.memcmp(address + size, expected, self.surround)
        ):
            return
        before = ctypes.string_at(address - self.surround, self.surround)
        after = ctypes.string_at(address + size, self.surround)
        if before != expected or after != expected:
            low = self.surround - next((i for i, b in enumerate(before) if b != canary), self.surround)
            high = next((self.surround - i for i, b in enumerate(reversed(after)) if b != canary), 0)
            self.overrun = max(self.overrun, low, high)

    def _expected(self, canary: int) -> bytes:
        if canary not in self._canaries:
            self._canaries[canary] = bytes([canary]) * self.surround
        return self._canaries[canary]

    def _malloc(self, _ctx: Any, size: int) -> int:
        return self._allocate(size, self.fill)

    def _allocate(self, size: int, fill: int) -> int:
        if self.paged:
            return self._map(size, fill)
        start = libc.malloc(size + 2 * self.surround)
        if not start:
            return 0
        ctypes.memset(start, self.canary, self.surround)
        ctypes.memset(start + self.surround, fill, size)
        ctypes.memset(start + self.surround + size, self.canary, self.surround)
        self._live[start + self.surround] = size, self.canary
        return int(start) + self.surround

    def _map(self, size: int, fill: int) -> int:
        """New memory whose last byte, but for alignment, lies before a forbidden page."""
        inside = max(1, -(-size // PAGE)) * PAGE
        start = libc.mmap(None, inside + 2 * GUARD, PROT_NONE, _PRIVATE_ANONYMOUS, -1, 0)
        if start in (None, ctypes.c_void_p(-1).value):
            return 0
        libc.mprotect(start + GUARD, inside, PROT_READ | PROT_WRITE)
        address = int(start) + GUARD + (inside - size) // 16 * 16
        ctypes.memset(address, fill, size)
        self._mapped[address] = int(start), inside + 2 * GUARD
        return address

    def _calloc(self, _ctx: Any, count: int, size: int) -> int:
        return self._allocate(count * size, 0)

    def _realloc(self, _ctx: Any, address: int | None, size: int) -> int:
        new = self._allocate(size, self.fill)
        if address and new:
            known = self._live[address][0] if address in self._live else self._mapped[address][1] - 2 * GUARD
            ctypes.memmove(new, address, min(size, known))
            self._free(None, address, 0)
        return new

    def _free(self, _ctx: Any, address: int | None, _size: int) -> None:
        if address in self._mapped:
            libc.munmap(*self._mapped.pop(address))
            return
        known = self._live.pop(address or 0, None)
        if address is None or known is None:
            return
        self._look(address, *known)
        libc.free(address - self.surround)


def _capsule(handler: _Handler) -> Any:
    make = ctypes.pythonapi.PyCapsule_New
    make.restype = ctypes.py_object
    make.argtypes = [ctypes.c_void_p, ctypes.c_char_p, ctypes.c_void_p]
    return make(ctypes.addressof(handler), b"mem_handler", None)


def _numpy_function(index: int) -> Any:
    """A function of NumPy's C table that takes and gives one object."""
    from numpy._core import _multiarray_umath as core  # type: ignore[attr-defined]

    get = ctypes.pythonapi.PyCapsule_GetPointer
    get.restype = ctypes.c_void_p
    get.argtypes = [ctypes.py_object, ctypes.c_char_p]
    table = get(core._ARRAY_API, None)
    address = ctypes.cast(table, ctypes.POINTER(ctypes.c_void_p))[index]
    return ctypes.PYFUNCTYPE(ctypes.py_object, ctypes.py_object)(address)
