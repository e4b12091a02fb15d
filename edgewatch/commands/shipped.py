"""Files that ship with Edgewatch: inside an installed package, or beside it in a checkout."""

from __future__ import annotations

from pathlib import Path

import edgewatch
from edgewatch.errors import DeviceError


def find_calib() -> Path:
    """Folder of the optics and bands that ship as examples. Raises ``DeviceError`` if it is missing."""
    package = Path(edgewatch.__file__).parent
    for folder in (package / "calib", package.parent / "calib"):
        if (folder / "bands").is_dir():
            return folder
    raise DeviceError(f"{package / 'calib'}: the examples that ship with Edgewatch are missing: install it anew")
