"""What a kernel can reach besides its arguments: globals, closures, attributes, the static memory of libraries.

A walk over Python objects from the kernel, into functions and objects of the user's own modules only, and
the writable pages of shared libraries that belong to no installed package. What cannot be reached from
here (memory behind a C pointer, files) is not seen.
"""

from __future__ import annotations

import ctypes
import functools
import hashlib
import os
import random
import site
import sys
import sysconfig
import threading
import types
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from breakstep.audit.elf import is_extension, static_places

DEPTH = 8
POINTERS = 4096  # words of one static variable that are tried as pointers
MOST_POINTED = 1 << 22  # bytes looked at behind one pointer
LARGEST = 1 << 26  # bytes of an array beyond which it is not looked at
SHARED: dict[str, Callable[[], str]] = {
    "the generator of module random": lambda: repr(random.getstate()),
    "NumPy's global generator": lambda: repr(np.random.get_state()),
    "the working directory": os.getcwd,
    "the environment": lambda: repr(sorted(os.environ.items())),
    "the number of threads": lambda: repr(threading.active_count()),
}
"""What belongs to the whole process."""
LEAVES = (bool, int, float, complex, str, bytes, type(None))


@dataclass
class Reached:
    """Digests of what a kernel reaches.

    Attributes
    ----------
    digests : dict of str to str
        For each path, what it held.
    arrays : set of str
        Paths that lead to arrays and buffers.
    libraries : set of str
        Files of the shared libraries that it holds.
    compiled : set of str
        Functions compiled by Numba.
    words : set of str
        Strings that stand in the code of the user's functions.
    """

    digests: dict[str, str] = field(default_factory=dict)
    arrays: set[str] = field(default_factory=set)
    libraries: set[str] = field(default_factory=set)
    compiled: set[str] = field(default_factory=set)
    words: set[str] = field(default_factory=set)

    def differing(self, later: Reached) -> set[str]:
        """Paths that both have and that changed; what only one has is a cache that was filled."""
        return {
            path for path in self.digests.keys() & later.digests.keys() if self.digests[path] != later.digests[path]
        }


def reached_state(kernel: Any) -> Reached:
    """Everything a kernel reaches, digested."""
    found = Reached()
    seen: set[int] = set()
    for path, value in _walk(_title(kernel), kernel, seen, 0, found):
        found.digests[path] = value
    found.digests |= {path: _hashed(of().encode()) for path, of in SHARED.items()}
    return found


def _title(kernel: Any) -> str:
    return str(getattr(kernel, "__name__", type(kernel).__name__))


def _walk(path: str, value: Any, seen: set[int], depth: int, found: Reached) -> Iterator[tuple[str, str]]:
    if isinstance(value, LEAVES):
        yield path, _hashed(repr(value).encode())
        return
    if id(value) in seen or depth > DEPTH:
        return
    seen.add(id(value))
    data = _data(value)
    if data is not None:
        found.arrays.add(path)
        yield path, _hashed(data)
        return
    for name, inner in _parts(path, value, found):
        yield from _walk(name, inner, seen, depth + 1, found)


def _data(value: Any) -> bytes | None:
    """The bytes of something that holds bytes."""
    if isinstance(value, np.ndarray) and value.dtype != object and value.nbytes <= LARGEST:
        return value.tobytes()
    if isinstance(value, (bytearray, memoryview, ctypes.Array, ctypes.Structure)):
        return bytes(value)
    if isinstance(value, np.random.Generator):
        return repr(value.bit_generator.state).encode()
    if isinstance(value, np.random.RandomState):
        return repr(value.get_state()).encode()
    if isinstance(value, random.Random):
        return repr(value.getstate()).encode()
    if isinstance(value, (np.generic,)):
        return value.tobytes()
    return None


def _parts(path: str, value: Any, found: Reached) -> Iterator[tuple[str, Any]]:
    if isinstance(value, functools.partial):
        yield f"{path}.func", value.func
        yield f"{path}.args", value.args
        yield f"{path}.keywords", value.keywords
    elif isinstance(value, types.FunctionType):
        yield from _of_function(path, value, found)
    elif isinstance(value, types.MethodType):
        yield from ((f"{path}.__func__", value.__func__), (f"{path}.__self__", value.__self__))
    elif isinstance(value, ctypes.CDLL):
        found.libraries.add(str(value._name))
    elif hasattr(value, "py_func"):  # a function compiled by Numba
        if not str(getattr(value, "__module__", "")).startswith("breakstep."):
            found.compiled.add(path)
            yield from _of_function(path, value.py_func, found)
    elif isinstance(value, Mapping):
        yield f"the length of {path}", len(value)
        yield from ((f"{path}[{key!r}]", inner) for key, inner in list(value.items())[:200])
    elif isinstance(value, (list, tuple)):
        yield f"the length of {path}", len(value)
        yield from ((f"{path}[{i}]", inner) for i, inner in enumerate(list(value)[:200]))
    elif isinstance(value, (set, frozenset)):
        yield f"the elements of {path}", repr(sorted(map(repr, value)))
    elif _is_users(kind := str(getattr(type(value), "__module__", ""))) or kind.startswith("breakstep."):
        yield from _of_object(path, value)


def _of_object(path: str, value: Any) -> Iterator[tuple[str, Any]]:
    for kind in type(value).__mro__:
        if _is_users(kind.__module__):
            for name, inner in vars(kind).items():
                if isinstance(inner, types.FunctionType):
                    if not name.startswith("__") or name == "__call__":
                        yield f"{path}.{name}", inner
                elif not name.startswith("__") and not isinstance(inner, (property, classmethod, staticmethod)):
                    yield f"{kind.__name__}.{name}", inner
    yield from ((f"{path}.{name}", inner) for name, inner in getattr(value, "__dict__", {}).items())


def _of_function(path: str, function: types.FunctionType, found: Reached) -> Iterator[tuple[str, Any]]:
    for name, cell in zip(function.__code__.co_freevars, function.__closure__ or (), strict=False):
        try:
            yield name, cell.cell_contents
        except ValueError:
            continue
    yield f"the defaults of {path}", function.__defaults__
    yield f"the keyword defaults of {path}", function.__kwdefaults__
    yield from ((f"{path}.{name}", inner) for name, inner in vars(function).items())
    if not _is_users(function.__module__):
        return
    names = set(_names(function.__code__))
    found.words |= {word for code in _codes(function.__code__) for word in code.co_consts if isinstance(word, str)}
    for name in names & function.__globals__.keys():
        value = function.__globals__[name]
        if isinstance(value, types.ModuleType):
            if _is_users(value.__name__):
                yield from ((f"{name}.{n}", vars(value)[n]) for n in names & vars(value).keys())
        elif isinstance(value, type):
            if _is_users(value.__module__):
                yield from (
                    (f"{name}.{n}", inner)
                    for n, inner in vars(value).items()
                    if not n.startswith("__") and not callable(inner) and not isinstance(inner, (property, classmethod))
                )
        else:
            yield name, value


def _names(code: types.CodeType) -> Iterator[str]:
    for one in _codes(code):
        yield from one.co_names


def _codes(code: types.CodeType) -> Iterator[types.CodeType]:
    """The code of a function and of those inside it."""
    yield code
    for constant in code.co_consts:
        if isinstance(constant, types.CodeType):
            yield from _codes(constant)


@functools.cache
def _is_users(module: str) -> bool:
    """Whether a module is neither installed, nor part of Python, nor ours."""
    if not module or module == "builtins" or module in sys.stdlib_module_names:
        return False
    if module.split(".")[0] in sys.stdlib_module_names or module.startswith("breakstep."):
        return False
    file = getattr(sys.modules.get(module), "__file__", None)
    return file is not None and not _is_installed(Path(file))


@functools.cache
def _installed_places() -> tuple[Path, ...]:
    paths = {sysconfig.get_paths()[key] for key in ("stdlib", "platstdlib", "purelib", "platlib")}
    paths |= {*site.getsitepackages(), site.getusersitepackages(), "/usr/lib", "/lib", "/lib64", "/usr/lib64"}
    paths |= {f"{prefix}/{folder}" for prefix in (sys.prefix, sys.base_prefix) for folder in ("lib", "lib64")}
    return tuple(Path(path).resolve() for path in paths)


@functools.cache
def _is_installed(file: Path) -> bool:
    resolved = file.resolve()
    return any(resolved.is_relative_to(place) for place in _installed_places())


def _hashed(data: bytes) -> str:
    return hashlib.blake2b(data, digest_size=12).hexdigest()


def static_memory(named: set[str]) -> dict[str, bytes]:
    """The writable memory of shared libraries that no package installed, and of those named.

    Returns
    -------
    dict
        Contents by ``variable of library``, or by library where its table of symbols was stripped. Linux only;
        empty elsewhere.
    """
    maps = Path("/proc/self/maps")
    if not maps.exists():
        return {}
    wanted = {str(Path(name).resolve()) for name in named}
    bases: dict[str, int] = {}
    heaps: list[tuple[int, int]] = []
    for line in maps.read_text(encoding="utf-8").splitlines():
        parts = line.split(maxsplit=5)
        start, end = (int(x, 16) for x in parts[0].split("-"))
        file = parts[5] if len(parts) > 5 else ""
        if ".so" in file and int(parts[2], 16) == 0:
            bases.setdefault(file, start)
        elif parts[1].startswith("rw") and file in ("", "[heap]"):
            heaps.append((start, end))
    found: dict[str, bytes] = {}
    for file, base in bases.items():
        if file in wanted or not _is_installed(Path(file)):
            for title, offset, size in static_places(file):
                found[title] = ctypes.string_at(base + offset, size)
                if not is_extension(file):
                    found |= _pointed_at(title, found[title], heaps)
    return found


def _pointed_at(title: str, data: bytes, heaps: list[tuple[int, int]]) -> dict[str, bytes]:
    """The pieces of allocated memory that pointers among some static bytes lead to."""
    found = {}
    whole = np.frombuffer(data[: len(data) // 8 * 8], np.uint64)[:POINTERS]
    for address in {int(word) for word in whole if word and word % 16 == 0}:
        for start, end in heaps:
            if start + 16 <= address < end:
                (size,) = np.frombuffer(
                    ctypes.string_at(address - 8, 8), np.uint64
                )  # glibc: the piece's size and flags
                length = min(int(size) & ~15, end - address, MOST_POINTED)
                found[f"memory that {title} points to"] = ctypes.string_at(address, max(length - 16, 0))
    return found
