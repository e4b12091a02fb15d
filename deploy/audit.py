"""Asks a public database for known holes in what the station needs at run time, as it is installed.

    python3 -m venv desk && desk/bin/pip install 'pip-audit>=2.7'
    .venv/bin/python deploy/audit.py --tool desk/bin/pip-audit

Exit status 0: every package was looked up and none has a known hole; 1: holes, named; 3: not every package could be
looked up (no tool, no network, a package that the database does not answer for), which is never taken for "none".
Give ``--service osv`` or ``pypi`` to ask another database than the first that answers.
"""

from __future__ import annotations

import argparse
import importlib.metadata
import json
import re
import shlex
import subprocess
import sys
import tempfile
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

SERVICES = ("osv", "pypi")
"""Both hold the Python advisories; the first also has those of GitHub."""
PATIENCE_S = 120.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Looked:
    """What one look came to: package -> numbers of its holes (empty: none known), and what could not be looked up."""

    holes: dict[str, tuple[str, ...]] = field(default_factory=dict)
    missed: dict[str, str] = field(default_factory=dict)


def installed(top: str = "edgewatch") -> dict[str, str]:
    """Name -> version of every package that ``top`` needs at run time, and that those need. Extras are left out."""
    found: dict[str, str] = {}
    waiting = [top]
    while waiting:
        for need in importlib.metadata.requires(waiting.pop()) or []:
            name = re.split(r"[^A-Za-z0-9._-]", need, maxsplit=1)[0].lower()
            if "extra ==" in need or name in found:
                continue
            try:
                found[name] = importlib.metadata.version(name)
            except importlib.metadata.PackageNotFoundError:
                continue  # for another Python than this one, such as tomli
            waiting.append(name)
    return found


def read_report(text: str, wanted: dict[str, str]) -> Looked:
    """Read the tool's report (JSON). Raises ``ValueError`` when it is none."""
    report: Any = json.loads(text)
    if not isinstance(report, dict) or not isinstance(report.get("dependencies"), list):
        raise ValueError("no list of dependencies")
    holes: dict[str, tuple[str, ...]] = {}
    missed = dict.fromkeys(wanted, "the report does not name it")
    for one in report["dependencies"]:
        name = str(one.get("name", "")).lower()
        if name not in wanted:
            continue
        if isinstance(one.get("vulns"), list) and one.get("version") == wanted[name]:
            holes[name] = tuple(" ".join([hole["id"], *hole.get("aliases", [])]) for hole in one["vulns"])
            del missed[name]
        else:
            missed[name] = str(one.get("skip_reason", "another version was looked up"))
    return Looked(holes=holes, missed=missed)


def look(tool: list[str], service: str, wanted: dict[str, str]) -> Looked:
    """Ask one database. What goes wrong is said of every package."""
    with tempfile.TemporaryDirectory() as folder:
        pinned = Path(folder) / "pinned.txt"
        pinned.write_text("".join(f"{name}=={version}\n" for name, version in wanted.items()), encoding="utf-8")
        words = ["--requirement", str(pinned), "--no-deps", "--disable-pip", "--progress-spinner", "off"]
        try:
            run = subprocess.run(
                [*tool, *words, "--format", "json", "--vulnerability-service", service],
                capture_output=True,
                text=True,
                check=False,
                timeout=PATIENCE_S,
            )
            return read_report(run.stdout, wanted)
        except OSError as error:
            reason = f"{tool[0]}: {error.strerror or error}"
        except subprocess.TimeoutExpired:
            reason = f"no answer within {PATIENCE_S:.0f} s"
        except (ValueError, KeyError, TypeError, AttributeError):
            reason = (run.stderr.strip().splitlines() or ["the tool said nothing"])[-1][:300]
    return Looked(missed=dict.fromkeys(wanted, reason))


def main(words: list[str] | None = None) -> int:
    """Look, tell, and return the exit status."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--tool", default=f"{sys.executable} -m pip_audit", help="how pip-audit is called")
    parser.add_argument("--service", choices=SERVICES, action="append", help="database to ask (default: both in turn)")
    args = parser.parse_args(words)
    try:
        wanted = installed()
    except importlib.metadata.PackageNotFoundError:
        sys.stderr.write(f"audit: edgewatch is not installed for {sys.executable}; run the station's own Python\n")
        return 3
    looked = Looked(missed=dict.fromkeys(wanted, "not asked"))
    for service in args.service or SERVICES:
        looked = look(shlex.split(args.tool), service, wanted)
        if not looked.missed:
            break
        for reason in dict.fromkeys(looked.missed.values()):
            sys.stderr.write(f"audit: {service}: {reason}\n")
        if any(looked.holes.values()):
            break
    for name, version in sorted(wanted.items()):
        known = "; ".join(looked.holes.get(name, ())) or "no known hole"
        sys.stdout.write(f"{name:24} {version:12} {'COULD NOT LOOK' if name in looked.missed else known}\n")
    if any(looked.holes.values()):
        sys.stdout.write("holes are known: renew these packages\n")
        return 1
    if looked.missed:
        sys.stderr.write("audit: nothing can be said about these packages: ask again with network and tool\n")
        return 3
    sys.stdout.write("every package was looked up, and none has a known hole\n")
    return 0


if __name__ == "__main__":
    sys.exit(main())
