"""Part of every installation (pyproject.toml names it): compiles the sight's C sources where there is a C compiler.

Without one, or when it refuses, the installation says so and goes on: the sight's Python forms see the same, slower.
"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path
from typing import Any

from hatchling.builders.hooks.plugin.interface import BuildHookInterface
from packaging.tags import sys_tags

sys.path.insert(0, str(Path(__file__).parent))
from build_sight import compile_sight


class SightHook(BuildHookInterface[Any]):
    """Adds the compiled library to a wheel, which then is for this kind of machine, and to an editable installation."""

    def initialize(self, version: str, build_data: dict[str, Any]) -> None:
        """Called by hatchling before it builds."""
        if self.target_name != "wheel":
            return
        try:
            made = compile_sight()
        except FileNotFoundError:
            self.app.display_warning("no C compiler: Edgewatch will see with its Python forms, slower")
            return
        except subprocess.CalledProcessError as error:
            self.app.display_warning(f"the sight could not be compiled and will be slower: {error.stderr}")
            return
        build_data["artifacts"].append(str(made.relative_to(self.root)))
        build_data["pure_python"] = False
        build_data["tag"] = f"py3-none-{next(iter(sys_tags())).platform}"
