"""Modules of the user's that are loaded from a file, and that travel with the problem they make.

A worker imports what it is sent by name. A file that lies in some folder has no name that a worker knows, so it
gets one made from its path and its text, and its text goes along: where the file itself cannot be seen, a copy of it
is loaded. Knows nothing of what such a module offers.
"""

from __future__ import annotations

import hashlib
import importlib.util
import sys
import traceback
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType

import platformdirs

from breakstep.errors import ScenarioError

DIGITS = 12  # of the digest in a module's name: 48 bits, so that two files never share one


@dataclass(frozen=True)
class Source:
    """One file of Python as it was when it was loaded.

    Parameters
    ----------
    path : str
        Absolute.
    text : bytes
    """

    path: str
    text: bytes

    def __reduce__(self) -> tuple[object, tuple[str, bytes]]:
        """Whoever receives it has the module from then on, and so can receive what is defined there."""
        return _received, (self.path, self.text)

    @property
    def digest(self) -> str:
        """SHA-256 of the text."""
        return hashlib.sha256(self.text).hexdigest()

    @property
    def name(self) -> str:
        """What its module is called: the same in every process, and another when path or text are others."""
        mark = hashlib.sha256(self.path.encode() + b"\0" + self.text).hexdigest()[:DIGITS]
        return f"{Path(self.path).stem}_{mark}"

    def module(self) -> ModuleType:
        """The module, loaded once a process; other files beside it can be imported by their own names.

        Raises
        ------
        Exception
            Whatever the module raises.
        """
        if self.name not in sys.modules:
            see_folder(Path(self.path).parent)
            self._load(self._place())
        return sys.modules[self.name]

    def _place(self) -> Path:
        """The file, or a copy where there is none or where it has changed."""
        path = Path(self.path)
        try:
            if path.read_bytes() == self.text:
                return path
        except OSError:
            pass
        copy = platformdirs.user_cache_path("breakstep") / "code" / self.name / path.name
        copy.parent.mkdir(parents=True, exist_ok=True)
        if not copy.is_file():
            aside = copy.with_suffix(f".{id(self)}")
            aside.write_bytes(self.text)
            aside.replace(copy)  # several workers may come at once
        return copy

    def _load(self, path: Path) -> None:
        spec = importlib.util.spec_from_file_location(self.name, path)
        assert spec is not None
        assert spec.loader is not None
        module = importlib.util.module_from_spec(spec)
        sys.modules[self.name] = module
        try:
            spec.loader.exec_module(module)
        except BaseException:
            del sys.modules[self.name]
            raise


def _received(path: str, text: bytes) -> Source:
    source = Source(path, text)
    source.module()
    return source


def read_source(path: Path) -> Source:
    """A file as it is now.

    Raises
    ------
    ScenarioError
        It cannot be read.
    """
    try:
        return Source(str(path.absolute()), path.read_bytes())
    except OSError as error:
        why = "there is no such file" if isinstance(error, FileNotFoundError) else f"cannot be read ({error.strerror})"
        raise ScenarioError(f"{path}: {why}") from error


def see_folder(folder: Path) -> None:
    """Let modules of a folder be imported, behind all others: what lies there hides nothing."""
    if str(folder) not in sys.path and folder.is_dir():
        sys.path.append(str(folder))


def users_traceback(error: BaseException) -> str:
    """The traceback of an error from the first line of the user's on."""
    step = error.__traceback__
    while step is not None and (step.tb_frame.f_code.co_filename.startswith("<frozen importlib") or _is_ours(step)):
        step = step.tb_next
    return "".join(traceback.format_exception(type(error), error, step, chain=False))


def _is_ours(step: object) -> bool:
    return Path(step.tb_frame.f_code.co_filename).is_relative_to(Path(__file__).parents[1])  # type: ignore[attr-defined]
