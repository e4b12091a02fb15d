"""Damaged journals beside the journal: ``FILE.damaged-TIME``, with their logs; the newest stay, older ones give way.

``-unsent`` behind the name: what it holds was not taken over yet (killed meanwhile, no room for a new file). Such a
file is never deleted, however many there are, because it may hold the only copy of undelivered records; taking over is
tried at every start and once a minute, and gives it its final name. How many wait, and how large they are, is told.
"""

from __future__ import annotations

import contextlib
import re
import time
from pathlib import Path

UNSENT = "-unsent"
_LOGS = ("-wal", "-shm")
_NAME = re.compile(r"\.damaged-(\d{8}T\d{6}Z)(?:-(\d+))?(-unsent)?(-wal|-shm)?")


class Aside:
    """The damaged files beside ``journal``. Files of other names are left alone."""

    def __init__(self, journal: Path, *, keep: int) -> None:
        self._journal = journal
        self._keep = keep

    def take(self, utc_s: float) -> Path:
        """Rename the journal and its logs; return the new name. Raises ``OSError``."""
        stamp = time.strftime("%Y%m%dT%H%M%SZ", time.gmtime(utc_s))
        taken = {number for when, number in self._found() if when == stamp}
        number = max(taken, default=0) + 1
        aside = Path(f"{self._journal}.damaged-{stamp}{f'-{number}' if number > 1 else ''}{UNSENT}")
        for ending in (*_LOGS, ""):  # the file last: until it is renamed, the next start tries again
            with contextlib.suppress(FileNotFoundError):
                Path(f"{self._journal}{ending}").replace(f"{aside}{ending}")
        return aside

    def waiting(self) -> list[Path]:
        """Files that were not taken over yet, oldest first."""
        found = [path for _, paths in sorted(self._found().items()) for path in paths]
        return [path for path in found if path.name.endswith(UNSENT)]

    def size(self, aside: Path) -> int:
        """Bytes that a file takes with its logs."""
        size = 0
        for ending in ("", *_LOGS):
            with contextlib.suppress(OSError):
                size += Path(f"{aside}{ending}").stat().st_size
        return size

    def done(self, aside: Path) -> Path:
        """Give a file that was taken over its final name. Raises ``OSError``."""
        final = Path(str(aside)[: -len(UNSENT)])
        for ending in ("", *_LOGS):  # the file first: without its log it must not be taken over again
            with contextlib.suppress(FileNotFoundError):
                Path(f"{aside}{ending}").replace(f"{final}{ending}")
        return final

    def clear(self, newest: Path) -> list[str]:
        """Delete all but the newest files; return a line on each. ``newest`` and what waits always stays."""
        own = _NAME.fullmatch(newest.name[len(self._journal.name) :])
        groups = [
            paths
            for key, paths in sorted(self._found().items())
            if (own is None or key != _key(own)) and not any(path.name.endswith(UNSENT) for path in paths)
        ]
        return [_deleted(paths) for paths in groups[: max(0, len(groups) - (self._keep - 1))]]

    def _found(self) -> dict[tuple[str, int], list[Path]]:
        """When and which in that second -> the file and its logs."""
        found: dict[tuple[str, int], list[Path]] = {}
        with contextlib.suppress(OSError):
            for path in sorted(self._journal.parent.iterdir()):
                name = path.name
                match = (
                    _NAME.fullmatch(name[len(self._journal.name) :]) if name.startswith(self._journal.name) else None
                )
                if match:
                    found.setdefault(_key(match), []).append(path)
        return found


def _key(match: re.Match[str]) -> tuple[str, int]:
    return match[1], int(match[2] or 1)


def _deleted(paths: list[Path]) -> str:
    """Delete a file with its logs, and say so."""
    name = min((path.name for path in paths), key=len)
    try:
        for path in paths:
            path.unlink(missing_ok=True)
    except OSError as error:
        return f"{name} cannot be deleted: {error.strerror or error}"
    return f"deleted to make room: {name}"
