"""TOML files: configuration and bands."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

from edgewatch.errors import SettingsError

if sys.version_info >= (3, 11):
    import tomllib
else:  # pragma: no cover - the same parser under its older name
    import tomli as tomllib

MOST_BYTES = 4_000_000
"""A band holds its reference bars, thousands of which fit into this; a larger file is neither."""


def read_toml(path: Path) -> dict[str, Any]:
    """Parse a TOML file. Raises ``SettingsError`` naming the file when it cannot be read or parsed."""
    try:
        if path.stat().st_size > MOST_BYTES:
            raise SettingsError(f"{path}: larger than {MOST_BYTES} bytes: neither configuration nor band")
        data: dict[str, Any] = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise SettingsError(f"{path}: cannot be read: {error.strerror or error}") from error
    except UnicodeDecodeError as error:
        raise SettingsError(f"{path}: not UTF-8 text: {error.reason} at byte {error.start}") from error
    except (tomllib.TOMLDecodeError, RecursionError, ValueError) as error:
        raise SettingsError(f"{path}: not TOML: {error}") from error
    return data
