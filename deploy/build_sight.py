"""Compiles the sight's C sources: ``python deploy/build_sight.py``, and by itself at every installation.

Needs a C compiler (``cc``, or what ``CC`` names). Without one the installation goes on and the station sees the same,
only slower. Exit status 3 when there is no compiler, 1 when it refuses the sources.
"""

from __future__ import annotations

import os
import shlex
import subprocess
import sys
from pathlib import Path

FOLDER = Path(__file__).resolve().parents[1] / "edgewatch" / "sight" / "native"
NAME = "compiled.bin"
FLAGS = ("-std=gnu11", "-O3", "-fPIC", "-shared", "-fno-math-errno", "-fno-trapping-math", "-fvisibility=hidden")
"""Errors of square roots set no flag and no comparison traps, so loops become vector code; nothing is reordered."""


def source_mark(folder: Path) -> str:
    """As ``edgewatch.sight.native`` has it, which cannot be imported before numpy is there."""
    import hashlib

    digest = hashlib.sha256()
    for path in sorted([*folder.glob("*.c"), *folder.glob("*.h")]):
        digest.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()[:16]


def compile_sight(folder: Path = FOLDER) -> Path:
    """Compile; the library's path. Raises ``FileNotFoundError`` without a compiler, ``CalledProcessError`` when it
    refuses.
    """
    compiler = shlex.split(os.environ.get("CC", "cc"))
    made, fresh = folder / NAME, folder / f"{NAME}.{os.getpid()}"
    mark = f'-DSOURCES="{source_mark(folder)}"'
    sources = [str(path) for path in sorted(folder.glob("*.c"))]
    try:
        command = [*compiler, *FLAGS, mark, "-o", str(fresh), *sources, "-lm"]
        subprocess.run(command, check=True, capture_output=True, text=True)
        fresh.replace(made)  # a station that runs keeps the one that it has loaded
    finally:
        fresh.unlink(missing_ok=True)
    return made


def main() -> int:
    """Compile and say where it went."""
    try:
        print(compile_sight())
    except FileNotFoundError as error:
        print(f"no C compiler ({error.filename}); Debian, as root: apt-get install gcc libc6-dev", file=sys.stderr)
        return 3
    except subprocess.CalledProcessError as error:
        print(error.stderr, file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main())
