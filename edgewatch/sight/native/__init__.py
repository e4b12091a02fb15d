"""Compiled forms of the steps that cost most, and whether this installation has them.

Each C file in this folder is the compiled form of the Python module of the same name. ``deploy/build_sight.py``
compiles them when Edgewatch is installed; where no C compiler was there, the Python forms see the same, only slower,
and ``edgewatch check`` says so. A library that was compiled from other sources than those beside it is not used.
"""

from __future__ import annotations

import ctypes
import hashlib
from pathlib import Path
from typing import Any

from numpy.typing import NDArray

FOLDER = Path(__file__).parent
FILE = FOLDER / "compiled.bin"  # not .so, which Python would take for a module


def source_mark(folder: Path = FOLDER) -> str:
    """What tells these C sources from others: the start of a hash over all of them."""
    digest = hashlib.sha256()
    for path in sorted([*folder.glob("*.c"), *folder.glob("*.h")]):
        digest.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()[:16]


def load(file: Path = FILE) -> tuple[Any, str]:
    """The library, ``None`` when it cannot be used; and why not, empty when it can."""
    if not file.is_file():
        return None, "it was not compiled: no C compiler was there at the installation"
    try:
        library = ctypes.CDLL(str(file))
        mark = ctypes.c_char_p.in_dll(library, "edgewatch_sources").value
    except (OSError, ValueError) as error:
        return None, f"it does not load: {error}"
    if mark != source_mark(file.parent).encode():
        return None, "it was compiled from other sources; install again"
    return library, ""


LIBRARY, WHY_NOT = load()
"""The compiled steps or ``None``, and then the reason."""


single, double = ctypes.c_float, ctypes.c_double
"""Numbers as the compiled steps take them."""

reference = ctypes.byref
"""A record as they take it."""


_bytes: Any = ctypes.c_char * 0  # its type hints know no buffer before Python 3.12


def place(array: NDArray[Any], skipped: int = 0) -> ctypes.c_void_p:
    """Where a contiguous array begins in memory, or the value after so many of it. The caller keeps the array alive."""
    try:
        begin = ctypes.addressof(_bytes.from_buffer(array))  # half the time of the way below
    except (TypeError, ValueError):  # read-only
        begin = array.__array_interface__["data"][0]
    return ctypes.c_void_p(begin + skipped * array.itemsize if skipped else begin)


def start(array: NDArray[Any]) -> Any:
    """Where a contiguous array begins, for a call: half the time that ``place`` takes, and it keeps the array
    alive; a record does not take it. Raises ``TypeError`` or ``ValueError`` for an array with gaps.
    """
    try:
        return _bytes.from_buffer(array)
    except (TypeError, ValueError):  # read-only, as a picture may be
        if not array.flags.c_contiguous:
            raise
        return place(array)


def enough(found: int, room: int) -> bool:
    """Whether there was room for all that was found. Raises ``MemoryError`` when the compiled step could get none."""
    if found < 0:
        raise MemoryError("no memory for the sight")
    return found <= room
