"""``edgewatch COMMAND``: parse, run the command's module, turn errors into exit statuses.

Exit status: 0 done, 1 ran but the thing it checks does not hold, 2 bad usage or configuration, 3 a device or server
it needs is not there. Errors are one line on stderr, never a traceback.
"""

from __future__ import annotations

import argparse
import importlib
import os
import re
import sys
from collections.abc import Sequence
from typing import NoReturn

from edgewatch import __version__
from edgewatch.errors import DeviceError, SettingsError

COMMANDS = {
    "watch": "run the station until told to stop, or until a clip ends",
    "rehearse": "run the whole station on a simulated line with some foreign bars",
    "measure": "figures of a recording",
    "teach": "reference bars -> a band file",
    "contrast": "which taught grades this station can tell apart, and how fast",
    "review": "judge journalled bars again under other bands or risks",
    "scale": "optics from a checkerboard picture or two marked points",
    "check": "is this station fit to run?",
    "pace": "what frame rate this board sustains",
    "journal": "list and export bars, windows, alerts",
    "relay": "read, set or test the relay by hand",
}
"""Every command and its job; ``edgewatch/commands/NAME.py`` holds it and is imported when chosen.

A command module has ``EXAMPLE`` (str), ``declare(parser)`` and ``run(args) -> exit status``.
"""


class _Parser(argparse.ArgumentParser):
    """Usage errors are one line and exit status 2."""

    def error(self, message: str) -> NoReturn:
        self.exit(2, f"{self.prog}: {message}; see '{self.prog} --help'\n")


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command and return its exit status."""
    words = _with_pairs(sys.argv[1:] if argv is None else argv)
    parser = _Parser(prog="edgewatch", description="Edge monitor for inline grinding inspection.")
    parser.add_argument("--version", action="version", version=f"edgewatch {__version__}")
    choices = parser.add_subparsers(dest="command", metavar="COMMAND", required=True, parser_class=_Parser)
    chosen = next((word for word in words if not word.startswith("-")), "")
    for name, job in COMMANDS.items():
        sub = choices.add_parser(name, help=job, formatter_class=argparse.RawDescriptionHelpFormatter)
        if name == chosen:
            module = importlib.import_module(f"edgewatch.commands.{name}")
            sub.description = f"{job[0].upper()}{job[1:]}."
            sub.epilog = f"example:\n  {module.EXAMPLE}"
            module.declare(sub)
            sub.set_defaults(run=module.run)
    args = parser.parse_args(words)
    try:
        return int(args.run(args))
    except SettingsError as error:
        return _say(2, *error.problems)
    except DeviceError as error:
        return _say(3, str(error))
    except KeyboardInterrupt:
        return _say(130, "stopped by hand")
    except BrokenPipeError:  # the reader of our output has gone: nothing more to tell it
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0


_PAIR = re.compile(r"-[0-9.][^,]*,.+")


def _with_pairs(words: Sequence[str]) -> list[str]:
    """Tie a value such as ``-20,200`` to its option: argparse would take it for an option of its own."""
    tied: list[str] = []
    for word in words:
        if _PAIR.fullmatch(word) and tied and tied[-1].startswith("--") and "=" not in tied[-1]:
            tied[-1] += f"={word}"
        else:
            tied.append(word)
    return tied


def _say(status: int, *problems: str) -> int:
    """Print the problems as one line and return ``status``."""
    line = "; ".join(problems).replace("\n", " ").replace("\r", " ")
    print(f"edgewatch: {line}", file=sys.stderr)
    return status
