"""Kernels from compiled libraries: C, C++ or Fortran routines called with the interpreter's lock released.

A library is known by its path and the digest of its file. It is loaded once a process, where that digest is checked:
all workers run the same code or none does. Arrays are passed as they lie in memory, float64 in C order: an array of
shape (components, nx, ny, nz) has z fastest, so Fortran declares it with its indices reversed, ``u(nz, ny, nx, n)``.

A routine that updates its block in place cannot be let loose on the arrays of a run, which are shared and
write-protected; :class:`InPlace` gives it copies. What a routine does beyond its arguments is not seen here.
"""

from __future__ import annotations

import ctypes
import hashlib
import subprocess
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
import platformdirs

from breakstep.errors import DeclarationError
from breakstep.mesh.mesh import Triple
from breakstep.steps.step import Array, Call

Argument: TypeAlias = "np.ndarray[Any, np.dtype[Any]] | int | float"
RETURNS = {None: None, "int": ctypes.c_int, "double": ctypes.c_double}
FLAGS = ("-O2", "-fPIC", "-shared", "-ffp-contract=off")  # contraction would make bits depend on the machine

_LOADED: dict[tuple[str, str], ctypes.CDLL] = {}


def _digest(path: str) -> str:
    return hashlib.sha256(Path(path).read_bytes()).hexdigest()


@dataclass(frozen=True)
class Library:
    """A shared library.

    Parameters
    ----------
    path : str or Path
        Must be the same file on every worker.

    Raises
    ------
    DeclarationError
        There is no such file, or it cannot be loaded.
    """

    path: str
    digest: str = field(default="", repr=False)

    def __post_init__(self) -> None:
        path = str(Path(self.path).expanduser().absolute())
        object.__setattr__(self, "path", path)
        if not Path(path).is_file():
            raise DeclarationError(f"there is no library {path}; compile it first, or give the path of what was made")
        object.__setattr__(self, "digest", self.digest or _digest(path))
        self.load()

    def load(self) -> ctypes.CDLL:
        """The library in this process; the file is looked at once.

        Raises
        ------
        DeclarationError
            The file is not there, is another one than was declared, or is no library for this machine.
        """
        key = (self.path, self.digest)
        if key not in _LOADED:
            try:
                if _digest(self.path) != self.digest:
                    raise DeclarationError(
                        f"the library {self.path} is not the one that the problem was declared with; it must be the"
                        " same file on every worker, and stay as it is during a run"
                    )
                _LOADED[key] = ctypes.CDLL(self.path)
            except OSError as error:
                why = (str(error).splitlines() or [""])[0]
                raise DeclarationError(
                    f"the library {self.path} cannot be loaded here ({why}); it must be there on every worker,"
                    " compiled for its kind of machine"
                ) from error
        return _LOADED[key]

    def routine(self, name: str, *, by_reference: bool = False, returns: str | None = None) -> Routine:
        """A function of the library; see :class:`Routine`."""
        return Routine(self, name, by_reference, returns)

    @classmethod
    def build(cls, source: str | Path, compiler: str = "cc", flags: Sequence[str] = FLAGS) -> Library:
        """Compile one source file, once for each text of it and choice of flags, into the user's cache folder.

        Raises
        ------
        DeclarationError
            There is no such file or compiler, or the source does not compile; ``details["traceback"]`` holds what
            the compiler said.
        """
        path = Path(source).expanduser().absolute()
        if not path.is_file():
            raise DeclarationError(f"there is no source file {path}")
        text = "\0".join([compiler, *flags]).encode() + path.read_bytes()
        folder = platformdirs.user_cache_path("breakstep") / "libraries"
        made = folder / f"{path.stem}_{hashlib.sha256(text).hexdigest()[:12]}.so"
        if not made.is_file():
            folder.mkdir(parents=True, exist_ok=True)
            _compile(path, made, compiler, flags)
        return cls(str(made))


def _compile(source: Path, made: Path, compiler: str, flags: Sequence[str]) -> None:
    aside = made.with_suffix(f".{id(made):x}.so")
    try:
        # Fortran's module files go where the library goes, not into the current folder.
        done = subprocess.run(
            [compiler, *flags, str(source), "-o", str(aside), "-lm"],
            cwd=made.parent, capture_output=True, text=True, check=False,
        )  # fmt: skip
    except OSError as error:
        raise DeclarationError(
            f"{source.name} cannot be compiled: the compiler {compiler!r} cannot be started ({error.strerror});"
            " install it, or give the path of a library that has been compiled"
        ) from error
    if done.returncode:
        raise DeclarationError(f"{source.name} does not compile with {compiler}", traceback=done.stderr)
    aside.replace(made)


@dataclass(frozen=True)
class Routine:
    """A function of a shared library that can be called with arrays and numbers, and travels to workers.

    Arrays (float64 or int32, contiguous in memory) are passed as pointers, without a copy; whole numbers as ``int``;
    other numbers as ``double``. While it runs, other threads run too.

    Parameters
    ----------
    library : Library
    name : str
        As the library knows it: C++ needs ``extern "C"``, Fortran ``bind(c)``, or else the compiler's own spelling,
        mostly lower case with an underscore behind.
    by_reference : bool
        Whether numbers go by address too, as Fortran without ``value`` expects.
    returns : str, optional
        ``"int"`` or ``"double"``; by default what it returns is not looked at.

    Raises
    ------
    DeclarationError
        The library offers no such function.
    """

    library: Library
    name: str
    by_reference: bool = False
    returns: str | None = None

    def __post_init__(self) -> None:
        if self.returns not in RETURNS:
            raise DeclarationError(f"a routine returns 'int', 'double' or None, not {self.returns!r}")
        loaded = self.library.load()
        if not hasattr(loaded, self.name):
            other = f"{self.name.lower()}_"
            hint = f"; it offers {other!r}" if hasattr(loaded, other) else ""
            raise DeclarationError(
                f'the library {self.library.path} offers no function {self.name!r}{hint}; C++ needs extern "C",'
                " Fortran bind(c)"
            )

    def __call__(self, *arguments: Argument) -> Any:
        """Call it.

        Raises
        ------
        TypeError
            An argument that cannot be passed as it is.
        """
        function = self.library.load()[self.name]  # an object of its own: types set here meet nobody else's call
        function.restype = RETURNS[self.returns]
        return function(*(self._passed(place, one) for place, one in enumerate(arguments, start=1)))

    def _passed(self, place: int, one: Argument) -> Any:
        if isinstance(one, np.ndarray):
            return self._pointer(place, one)
        if isinstance(one, bool | np.bool_ | int | np.integer):
            number: Any = ctypes.c_int(int(one))
            if number.value != int(one):
                raise TypeError(f"argument {place} of {self.name}: {one} does not fit an int of the library's")
        elif isinstance(one, float | np.floating):
            number = ctypes.c_double(float(one))
        else:
            raise TypeError(
                f"argument {place} of {self.name}: expected an array or a number, came {type(one).__name__}"
            )
        return ctypes.byref(number) if self.by_reference else number

    def _pointer(self, place: int, array: np.ndarray[Any, np.dtype[Any]]) -> ctypes.c_void_p:
        if array.dtype not in (np.float64, np.int32) or not (array.flags.c_contiguous or array.flags.f_contiguous):
            layout = "in one piece" if array.flags.c_contiguous or array.flags.f_contiguous else "with gaps"
            raise TypeError(
                f"argument {place} of {self.name}: expected float64 or int32 in one piece of memory,"
                f" came {array.dtype} {array.shape} {layout}"
            )
        return ctypes.c_void_p(array.ctypes.data)


Arguments: TypeAlias = Callable[[Mapping[str, Array], Call], Sequence[Any]]


@dataclass(frozen=True)
class InPlace:
    """A kernel made of a routine that updates a block with its ghost zones in place, as a legacy code has it.

    The routine gets private copies of everything the step reads, changes them as it likes, and what lies inside the
    ghost zones of the updated fields is the step's result. One copy of the block a call is the price; a routine that
    keeps old and new apart needs no wrapper. A whole number other than 0 that it returns is taken for a failure.

    Parameters
    ----------
    routine : callable
        A :class:`Routine`, or any callable that can be pickled (f2py's and cffi's behind a function of a module).
    arguments : callable
        ``arguments(blocks, call) -> sequence``: what to call it with; ``blocks`` holds the copies by field, of shape
        (components, nx + 2 hx, ny + 2 hy, nz + 2 hz). ``blocks["u"].T`` is the same memory as f2py wants it.
    updates : tuple of str
        The fields that it changes: the step's writes.
    shared : tuple of str
        Fields that it is trusted not to change, and gets without a copy.

    Raises
    ------
    TypeError
        The routine was given what it cannot take, or a field to update is not among the step's reads.
    RuntimeError
        It says that it failed.
    """

    routine: Callable[..., Any]
    arguments: Arguments
    updates: tuple[str, ...]
    shared: tuple[str, ...] = ()

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        """The step's result: the interior of each updated block."""
        missing = [name for name in self.updates if name not in arrays or name in self.shared]
        if missing:
            raise TypeError(f"the routine updates {', '.join(missing)}, which the step must read, and not as shared")
        blocks = {name: array if name in self.shared else array.copy() for name, array in arrays.items()}
        status = self.routine(*self.arguments(blocks, call))
        if isinstance(status, int) and status != 0:
            raise RuntimeError(f"the routine {getattr(self.routine, 'name', '')} returned {status}".replace("  ", " "))
        return {name: inside(blocks[name], call.shape).copy() for name in self.updates}


def inside(block: Array, shape: Triple) -> Array:
    """The zones of a block without its ghost zones, as a view."""
    cuts = [slice((p - n) // 2, (p - n) // 2 + n) for p, n in zip(block.shape[1:], shape, strict=True)]
    return block[(slice(None), *cuts)]
