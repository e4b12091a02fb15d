"""The lowest versions that pyproject.toml allows hold no hole that was published and mended, as far as the table goes.

Works without a network; `deploy/audit.py` asks the databases themselves. The rows are from memory, not looked up: the
number leads to the advisory (https://www.cve.org/CVERecord?id=…). A row is added when an advisory comes out.
"""

from __future__ import annotations

import importlib.metadata
import sys
from pathlib import Path

import pytest
from packaging.requirements import Requirement
from packaging.specifiers import SpecifierSet
from packaging.version import Version

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib

HOLES = (
    # package, first version without it, number, what it is
    ("opencv-python-headless", "4.8.1.78", "CVE-2023-4863", "heap overflow in the libwebp that the wheel brings along"),
    ("opencv-python-headless", "4.2.0.32", "CVE-2019-5063", "heap overflow in reading XML, YAML or JSON storage"),
    ("numpy", "1.16.3", "CVE-2019-6446", "numpy.load unpickles unless told not to"),
    ("numpy", "1.21.0", "CVE-2021-33430", "buffer overflow in making arrays of very many dimensions"),
    ("numpy", "1.22.0", "CVE-2021-34141", "incomplete comparison of strings in numpy.core"),
    ("scipy", "1.10.0", "CVE-2023-25399", "reference leak in Py_FindObjects (disputed)"),
)
NONE_KNOWN = ("paho-mqtt", "pyserial", "tomli")
"""Packages of which no published hole was known when this was written."""

PROJECT = tomllib.loads((Path(__file__).parents[2] / "pyproject.toml").read_text(encoding="utf-8"))["project"]
NEEDS = {need.name: need for need in map(Requirement, PROJECT["dependencies"])}


def lowest(specifier: SpecifierSet) -> Version:
    """The lowest version that the bound allows."""
    (bound,) = [one for one in specifier if one.operator in (">=", "==", "~=")]
    return Version(bound.version)


def test_every_runtime_dependency_was_thought_of() -> None:
    """A new dependency has rows here, or is said to have none."""
    assert {name for name, *_ in HOLES} | set(NONE_KNOWN) == set(NEEDS)
    assert not {name for name, *_ in HOLES} & set(NONE_KNOWN)


@pytest.mark.parametrize(("name", "mended", "number", "what"), HOLES, ids=[row[2] for row in HOLES])
def test_the_bound_excludes_the_hole(name: str, mended: str, number: str, what: str) -> None:
    """Nobody who installs within the bounds can get the version with the hole."""
    assert lowest(NEEDS[name].specifier) >= Version(mended), f"{number}: {what}"


def test_what_is_installed_here_is_within_the_bounds() -> None:
    """The tests run on versions that a station may have."""
    wanted = [need for need in NEEDS.values() if need.marker is None or need.marker.evaluate()]
    assert len(wanted) >= 5
    for need in wanted:
        assert need.specifier.contains(importlib.metadata.version(need.name), prereleases=True), need


def test_the_audit_tool_is_an_extra() -> None:
    """It does not lie on a board."""
    assert "pip-audit" not in NEEDS
    assert [Requirement(one).name for one in PROJECT["optional-dependencies"]["audit"]] == ["pip-audit"]
