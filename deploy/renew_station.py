"""Writes deploy/station.toml anew: the values that stand there, the comments from the declarations in settings.py.

    .venv/bin/python deploy/renew_station.py

Run it after a key has been added, renamed or described better; a test holds the file against the declarations.
"""

from __future__ import annotations

import dataclasses
import inspect
import json
import textwrap
from pathlib import Path
from typing import Any

from edgewatch.commands.options import read_toml
from edgewatch.settings import allowed, read_settings, sections

SAMPLE = Path(__file__).with_name("station.toml")
HEAD = """\
Configuration of one Edgewatch station, with every key: what it is, what it may hold, and its default. Copy this
file to the station's folder and keep what differs there; a key left out has its default. `edgewatch check` says what
is wrong with a file, all at once.

The values are those of an invented example: bar mill Hollowmere, line peel-2, station wheel-a.
The relay is a process stop, never a safety function: see deploy/guides/relay.md.
"""


def toml_value(value: Any) -> str:
    """Return one of our values as TOML has it; byte frames are written in hexadecimal, as settings read them."""
    if isinstance(value, bytes):
        return json.dumps(value.hex(" ").upper())
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(toml_value(part) for part in value) + "]"
    return json.dumps(value, ensure_ascii=False)


def comment(text: str) -> str:
    """Return the text as comment lines, blank lines kept."""
    wrapped = (textwrap.fill(part, 116) for part in text.splitlines())
    return "".join(f"# {line}".rstrip() + "\n" for part in wrapped for line in part.split("\n"))


def render(values: dict[str, dict[str, Any]]) -> str:
    """Return the whole file: every key of every section, with ``values`` where given and the default elsewhere."""
    parts = ["".join(f"# {line}".rstrip() + "\n" for line in HEAD.splitlines())]
    for section, kind in sections().items():
        parts.append(f"\n{comment(inspect.getdoc(kind) or '')}[{section}]\n")
        for part in dataclasses.fields(kind):
            value = values.get(section, {}).get(part.name, part.default)
            allows = f"{allowed(section, part.name)}. Default: {toml_value(part.default)}"
            says = part.metadata["help"]
            parts.append(f"\n{comment(f'{says}.')}{comment(f'Allowed: {allows}.')}")
            parts.append(f"{part.name} = {toml_value(value)}\n")
    return "".join(parts)


def main() -> None:
    """Renew the sample in place; a key that is no longer declared is a ``SettingsError``."""
    values = read_toml(SAMPLE) if SAMPLE.exists() else {}
    read_settings(values, file=SAMPLE.name)
    SAMPLE.write_text(render(values), encoding="utf-8")


if __name__ == "__main__":
    main()
