"""Where a shared library keeps its static variables: as much of the ELF format as that takes (64 bits, little end)."""

from __future__ import annotations

import struct
from functools import cache
from pathlib import Path

_LOAD, _WRITE, _OBJECT, _TABLES = 1, 2, 1, (2, 11)  # segment type and flag, symbol type, sections .symtab and .dynsym
_RUNTIME = ("completed.", "__", "_DYNAMIC", "_GLOBAL")  # variables of the compiler's runtime
_PYTHON = ("Py", "pyx", "f2py", "capi", "module")  # and of extension modules: counts of references change there


@cache
def is_extension(file: str) -> bool:
    """Whether a library is an extension module of Python, whose statics point at Python's objects."""
    try:
        return b"PyInit_" in Path(file).read_bytes()
    except OSError:
        return True


@cache
def static_places(file: str) -> tuple[tuple[str, int, int], ...]:
    """Title, offset from the library's base, and size of each writable static variable [bytes].

    Without symbols, the writable segments as a whole; nothing for a file of another format.
    """
    try:
        data = Path(file).read_bytes()
        segments = _writable(data)
        variables = sorted(_variables(data, segments))
    except (OSError, struct.error, IndexError, UnicodeDecodeError):
        return ()
    name = file.rsplit("/", 1)[-1]
    if variables:
        return tuple((f"static variable {symbol} of {name}", start, size) for symbol, start, size in variables)
    return tuple((f"static memory of {name}", start, size) for start, size in segments)


def _writable(data: bytes) -> list[tuple[int, int]]:
    """Offset and size of the writable segments."""
    if data[:6] != b"\x7fELF\x02\x01":
        return []
    (table,) = struct.unpack_from("<Q", data, 32)
    size, count = struct.unpack_from("<HH", data, 54)
    found = []
    for entry in range(count):
        kind, flags, _, address, _, _, length, _ = struct.unpack_from("<IIQQQQQQ", data, table + entry * size)
        if kind == _LOAD and flags & _WRITE:
            found.append((address, length))
    return found


def _variables(data: bytes, segments: list[tuple[int, int]]) -> set[tuple[str, int, int]]:
    """Name, offset and size of the variables in those segments that the library names."""
    if not segments:
        return set()
    (table,) = struct.unpack_from("<Q", data, 40)
    size, count = struct.unpack_from("<HH", data, 58)
    sections = [struct.unpack_from("<IIQQQQIIQQ", data, table + entry * size) for entry in range(count)]
    found = set()
    for section in sections:
        if section[1] not in _TABLES:
            continue
        names = sections[section[6]][4]
        for at in range(section[4], section[4] + section[5], 24):
            name, info, _, _, address, length = struct.unpack_from("<IBBHQQ", data, at)
            inside = any(start <= address and address + length <= start + most for start, most in segments)
            if info & 15 == _OBJECT and length and inside:
                word = data[names + name : data.index(b"\0", names + name)].decode()
                if not word.startswith(_RUNTIME) and not any(mark in word for mark in _PYTHON):
                    found.add((word, int(address), int(length)))
    return found
