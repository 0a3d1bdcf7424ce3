"""Modules of the user's that are loaded from a file, and that travel with the problem they make.

A worker imports what it is sent by name. A file that lies in some folder has no name that a worker knows, so it
gets one made from its path and its text, and its text goes along: where the file itself cannot be seen, a copy of it
is loaded. Files beside it that it imports go along under their own names; one that has changed is loaded anew.
Knows nothing of what such a module offers, and leaves packages to Python.
"""

from __future__ import annotations

import ast
import hashlib
import importlib.util
import sys
import traceback
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType

import platformdirs

from breakstep.errors import ScenarioError

DIGITS = 12  # of the digest in a module's name: 48 bits, so that two files never share one
MARK = "__breakstep_digest__"  # in modules loaded here under their own names: of the texts they were made from


@dataclass(frozen=True)
class Source:
    """One file of Python as it was when it was loaded.

    Parameters
    ----------
    path : str
        Absolute.
    text : bytes
    beside : tuple of Source
        Files of the same folder that it imports, directly or not, each after those that it imports itself.
    """

    path: str
    text: bytes
    beside: tuple[Source, ...] = ()

    def __reduce__(self) -> tuple[object, tuple[object, ...]]:
        """Whoever receives it has the module from then on, and so can receive what is defined there."""
        return _received, (self.path, self.text, tuple((one.path, one.text) for one in self.beside))

    @property
    def digest(self) -> str:
        """SHA-256 of its own text and of those beside it."""
        found = hashlib.sha256(self.text)
        for one in self.beside:
            found.update(b"\0" + one.path.encode() + b"\0" + one.text)
        return found.hexdigest()

    @property
    def stem(self) -> str:
        """The file's own name."""
        return Path(self.path).stem

    @property
    def name(self) -> str:
        """What its module is called: the same in every process, and another when path or any text are others."""
        mark = hashlib.sha256(f"{self.path}\0{self.digest}".encode()).hexdigest()[:DIGITS]
        return f"{self.stem}_{mark}"

    def module(self) -> ModuleType:
        """The module, loaded once a process; what lies beside it can be imported by its own name.

        Raises
        ------
        Exception
            Whatever the module raises.
        """
        for number, one in enumerate(self.beside):
            Source(one.path, one.text, self.beside[:number])._be_current(self.name)
        if self.name not in sys.modules:
            see_folder(Path(self.path).parent)
            _load(self.name, self._place(self.name))
        return sys.modules[self.name]

    def _be_current(self, folder: str) -> None:
        """Load it under its own name, unless what goes by that name was made from the same texts."""
        if getattr(sys.modules.get(self.stem), MARK, None) != self.digest:
            setattr(_load(self.stem, self._place(folder)), MARK, self.digest)

    def _place(self, folder: str) -> Path:
        """The file, or a copy where there is none or where it has changed."""
        path = Path(self.path)
        try:
            if path.read_bytes() == self.text:
                return path
        except OSError:
            pass
        copy = platformdirs.user_cache_path("breakstep") / "code" / folder / path.name
        copy.parent.mkdir(parents=True, exist_ok=True)
        if not copy.is_file():
            aside = copy.with_suffix(f".{id(self)}")
            aside.write_bytes(self.text)
            aside.replace(copy)  # several workers may come at once
        return copy


def _load(name: str, path: Path) -> ModuleType:
    spec = importlib.util.spec_from_file_location(name, path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    before = sys.modules.get(name)
    sys.modules[name] = module
    try:
        spec.loader.exec_module(module)
    except BaseException:
        del sys.modules[name]
        if before is not None:
            sys.modules[name] = before
        raise
    return module


def _received(path: str, text: bytes, beside: tuple[tuple[str, bytes], ...]) -> Source:
    source = Source(path, text, tuple(Source(*one) for one in beside))
    source.module()
    return source


def read_source(path: Path) -> Source:
    """A file as it is now.

    Raises
    ------
    ScenarioError
        It cannot be read.
    """
    path = path.absolute()
    try:
        text = path.read_bytes()
        return Source(str(path), text, tuple(_beside(path, text, {path.stem})))
    except OSError as error:
        why = "there is no such file" if isinstance(error, FileNotFoundError) else f"cannot be read ({error.strerror})"
        raise ScenarioError(f"{path}: {why}") from error


def _beside(path: Path, text: bytes, seen: set[str]) -> Iterator[Source]:
    """Files of the same folder that a text imports, each after those that it imports itself."""
    for name in _imported(text):
        file = path.with_name(f"{name}.py")
        if name not in seen and file.is_file() and not _is_elsewhere(name, path.parent):
            seen.add(name)
            theirs = file.read_bytes()
            yield from _beside(file, theirs, seen)
            yield Source(str(file), theirs)


def hidden(source: Source) -> list[str]:
    """Files beside a source that are imported by name, there or beside it, and not found: Python finds another."""
    found: dict[str, None] = {}
    for one in (*source.beside, source):
        path = Path(one.path)
        for name in _imported(one.text):
            file = path.with_name(f"{name}.py")
            if name != path.stem and file.is_file() and _is_elsewhere(name, path.parent):
                found[str(file)] = None
    return list(found)


def _imported(text: bytes) -> list[str]:
    """First words of the modules that a text imports; none of a text that Python cannot read, which it will say."""
    try:
        nodes = list(ast.walk(ast.parse(text)))
    except (SyntaxError, ValueError):
        return []
    plain = [alias.name for node in nodes if isinstance(node, ast.Import) for alias in node.names]
    froms = [node.module or "" for node in nodes if isinstance(node, ast.ImportFrom) and not node.level]
    return list(dict.fromkeys(name.partition(".")[0] for name in (*plain, *froms) if name))


def _is_elsewhere(name: str, folder: Path) -> bool:
    """Whether Python finds a module of that name in another place, which a file of the user's must not hide."""
    if hasattr(sys.modules.get(name), MARK):
        return False
    try:
        spec = importlib.util.find_spec(name)
    except (ImportError, ValueError):
        return name in sys.modules
    return spec is not None and (spec.origin is None or Path(spec.origin).parent != folder)


def see_folder(folder: Path) -> None:
    """Let modules of a folder be imported, behind all others: what lies there hides nothing."""
    if str(folder) not in sys.path and folder.is_dir():
        sys.path.append(str(folder))


def users_traceback(error: BaseException) -> str:
    """The traceback of an error without the lines of this package and of Python's import machinery."""
    frames = [frame for frame in traceback.extract_tb(error.__traceback__) if not _is_ours(frame.filename)]
    lines = ["Traceback (most recent call last):\n", *traceback.format_list(frames)] if frames else []
    return "".join([*lines, *traceback.format_exception_only(error)])


def _is_ours(file: str) -> bool:
    """Whether a line is of no use to the user; scenarios that come with the package are the user's as well."""
    package = Path(__file__).parents[1]
    shipped = package / "scenario" / "library"
    if file.startswith("<"):
        return True
    return Path(file).is_relative_to(package) and not Path(file).is_relative_to(shipped)
