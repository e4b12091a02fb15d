"""deploy/audit.py: what its tool reports is told as it is, and where nobody could look it never says "none".

The tool itself is no part of the tests' installation: a stand-in prints reports as pip-audit 2.10 does.
"""

from __future__ import annotations

import importlib.metadata
import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

AUDIT = Path(__file__).parents[1] / "deploy" / "audit.py"
RUNTIME = ["numpy", "opencv-python-headless", "paho-mqtt", "pyserial", "scipy"]
if sys.version_info < (3, 11):
    RUNTIME.append("tomli")


def entry(name: str, *holes: str, version: str = "") -> dict[str, Any]:
    """One package of a report."""
    vulns = [{"id": hole, "fix_versions": [], "aliases": ["GHSA-x"], "description": ""} for hole in holes]
    return {"name": name, "version": version or importlib.metadata.version(name), "vulns": vulns}


def skipped(name: str) -> dict[str, Any]:
    """A package that the database did not answer for."""
    return {"name": name, "skip_reason": f"Dependency not found on PyPI and could not be audited: {name} (1)"}


def audit(folder: Path, reports: dict[str, str], status: int = 0) -> subprocess.CompletedProcess[str]:
    """Run the script with a tool that prints ``reports[service]``, or fails where there is none."""
    tool = folder / "tool.py"
    tool.write_text(
        "import sys\n"
        f"reports = {reports!r}\n"
        "pinned = open(sys.argv[sys.argv.index('--requirement') + 1]).read().split()\n"
        f"assert [one.split('==')[0] for one in pinned] and len(pinned) == {len(RUNTIME)}, pinned\n"
        "service = sys.argv[sys.argv.index('--vulnerability-service') + 1]\n"
        "if service not in reports:\n"
        "    sys.exit('ConnectionError: name resolution failed')\n"
        "print(reports[service])\n"
        f"sys.exit({status})\n"
    )
    return subprocess.run(
        [sys.executable, str(AUDIT), "--tool", f"{sys.executable} {tool}"], capture_output=True, text=True, check=False
    )


def report(*entries: dict[str, Any]) -> str:
    """A report in the tool's form."""
    return json.dumps({"dependencies": list(entries), "fixes": []})


def test_all_looked_up_and_none(tmp_path: Path) -> None:
    """Status 0 and each package with its version."""
    run = audit(tmp_path, {"osv": report(*map(entry, RUNTIME))})
    assert (run.returncode, run.stderr) == (0, "")
    assert [line.split()[0] for line in run.stdout.splitlines()[:-1]] == sorted(RUNTIME)
    assert run.stdout.splitlines()[-1] == "every package was looked up, and none has a known hole"


def test_holes_are_named(tmp_path: Path) -> None:
    """Status 1, the number, and the package; also when another package could not be looked up."""
    for others in (list(map(entry, RUNTIME[1:])), list(map(skipped, RUNTIME[1:]))):
        run = audit(tmp_path, {"osv": report(entry("numpy", "CVE-2099-1"), *others)}, status=1)
        assert run.returncode == 1
        assert "CVE-2099-1 GHSA-x" in run.stdout
        assert run.stdout.startswith("numpy")


def test_the_second_database_is_asked_when_the_first_does_not_answer(tmp_path: Path) -> None:
    """And what went wrong with the first is said."""
    run = audit(tmp_path, {"pypi": report(*map(entry, RUNTIME))})
    assert run.returncode == 0
    assert "osv: ConnectionError" in run.stderr


@pytest.mark.parametrize(
    "reports",
    [
        {},
        {"osv": "", "pypi": "[]"},
        {"pypi": report(*map(skipped, RUNTIME))},  # the tool itself ends with "No known vulnerabilities" and status 0
        {"pypi": report(*map(entry, RUNTIME[:-1]))},
        {"pypi": report(*map(entry, RUNTIME[:-1]), skipped(RUNTIME[-1]))},
        {"pypi": report(*map(entry, RUNTIME[:-1]), entry(RUNTIME[-1], version="0.0.1"))},
    ],
    ids=["no network", "no report", "all skipped", "one missing", "one skipped", "another version"],
)
def test_where_nobody_could_look_it_says_so(tmp_path: Path, reports: dict[str, str]) -> None:
    """Status 3, never "no holes"."""
    run = audit(tmp_path, reports)
    assert run.returncode == 3
    assert "COULD NOT LOOK" in run.stdout
    assert "none has" not in run.stdout
    assert "nothing can be said" in run.stderr


def test_without_the_tool_it_says_so(tmp_path: Path) -> None:
    """A machine without pip-audit."""
    run = subprocess.run(
        [sys.executable, str(AUDIT), "--tool", str(tmp_path / "none")], capture_output=True, text=True, check=False
    )
    assert run.returncode == 3
    assert "No such file" in run.stderr
    assert run.stdout.count("COULD NOT LOOK") == len(RUNTIME)
