"""The shape of the project: what may import what, what lies at the top, what a core module may never do."""

from __future__ import annotations

import ast
import fnmatch
import graphlib
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib

TOP = Path(__file__).parents[1]
PACKAGE = TOP / "edgewatch"

LEVELS = {
    "errors": 0,
    "backoff": 0,
    "settings": 0,
    "sight": 0,
    "figures": 0,
    "judge": 0,
    "monitor": 0,
    "rehearsal": 0,
    "wire": 0,
    "frames": 1,
    "record": 1,
    "link": 1,
    "relay": 1,
    "station": 2,
    "commands": 3,
    "__main__": 4,
}
"""Part of the package -> how high it stands; imports run downwards, and within a part."""
CORE, RIM = 0, 1

PURE = re.compile(
    "__future__|abc|base64|bisect|calendar|collections|contextlib|copy|dataclasses|datetime|difflib|enum|fractions|"
    "functools|hashlib|heapq|itertools|json|math|numbers|operator|re|reprlib|statistics|string|struct|textwrap|types|"
    "typing|unicodedata|zlib"
)
"""Standard modules that compute and nothing else (of datetime, what reads the clock is refused below)."""
DISTRIBUTIONS = {
    "numpy": "numpy",
    "opencv-python-headless": "cv2",
    "scipy": "scipy",
    "paho-mqtt": "paho",
    "pyserial": "serial",
    "tomli": "tomli",
}
"""Runtime dependencies, exactly, and the name each is imported by."""
OUTSIDE = re.compile(
    "open|print|input|eval|exec|breakpoint|__import__|now|utcnow|today|imread|imreadmulti|imwrite|imshow|waitKey|"
    "VideoCapture|VideoWriter|FileStorage|setNumThreads|load|loadtxt|genfromtxt|fromfile|memmap|save|savez|"
    "savez_compressed|savetxt|tofile|theRNG|randu|randn|(?:read|write)_(?:text|bytes)"
)
"""Functions that a core module may not call, by their last name: each reads or changes the world."""
COMPILED = PACKAGE / "sight" / "native"
"""The one part of the core that loads a file: the core's own compiled steps, when it is imported."""
LONGEST_MODULE = 700
"""Lines. A module beyond it holds more than one idea."""
LARGEST_FILE = 1_000_000
"""Bytes of one file in the repository."""


def tracked() -> list[Path]:
    """The files of the project: what git tracks, or, in a tree without git, what .gitignore leaves."""
    if (TOP / ".git").exists():
        command = ["git", "-c", "safe.directory=*", "-C", str(TOP), "ls-files", "-z"]
        names = subprocess.run(command, capture_output=True, check=True, text=True).stdout.split("\0")
        return [TOP / name for name in names if name and (TOP / name).is_file()]
    ignored = [line.strip("/") for line in (TOP / ".gitignore").read_text(encoding="utf-8").split()]
    return [
        path
        for path in TOP.rglob("*")
        if path.is_file()
        and not any(fnmatch.fnmatch(part, rule) for part in path.relative_to(TOP).parts for rule in ignored)
    ]


def modules() -> list[Path]:
    """Every module of the package."""
    return sorted(PACKAGE.rglob("*.py"))


def dotted(path: Path) -> str:
    """The module's full name."""
    parts = path.relative_to(TOP).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def part_of(name: str) -> str:
    """The part of the package that a full module name belongs to; empty for the package itself."""
    return name.split(".")[1] if "." in name else ""


def parse(path: Path) -> ast.Module:
    """The module's syntax tree."""
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))


def imports(tree: ast.AST) -> Iterator[tuple[str, int]]:
    """Every module imported, at the top or inside a function, with its line; ``from a import b`` gives ``a.b``."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, node.lineno
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"line {node.lineno}: imports are absolute"
            for alias in node.names:
                yield f"{node.module}.{alias.name}", node.lineno


def core_modules() -> list[Path]:
    """The modules of the core."""
    return [path for path in modules() if LEVELS.get(part_of(dotted(path)), CORE) == CORE]


def where(path: Path, line: int) -> str:
    """File and line, to click on."""
    return f"{path.relative_to(TOP)}:{line}"


def test_every_part_of_the_package_has_its_level() -> None:
    """A new part must be placed before anything can be said about its imports."""
    assert {part_of(dotted(path)) for path in modules()} - {""} == set(LEVELS)


def test_imports_run_downwards_only() -> None:
    """commands -> station -> rim -> core; parts of the rim do not know each other."""
    wrong = []
    for path in modules():
        part = part_of(dotted(path))
        for name, line in imports(parse(path)):
            other = part_of(name) if name.startswith("edgewatch.") else part
            if other in ("", "__version__", part):
                continue
            own = LEVELS.get(part, CORE)
            if LEVELS[other] > own or (LEVELS[other] == own and own != CORE):
                wrong.append(f"{where(path, line)}: {part} imports {name}")
    assert wrong == []


def test_no_module_imports_itself_by_way_of_others() -> None:
    """The modules can be put in an order in which each needs only earlier ones."""
    names = {dotted(path) for path in modules()}
    graph: dict[str, set[str]] = {}
    for path in modules():
        found = {name if name in names else name.rpartition(".")[0] for name, _ in imports(parse(path))}
        graph[dotted(path)] = (found & names) - {"edgewatch", dotted(path)}
    order = list(graphlib.TopologicalSorter(graph).static_order())  # raises CycleError, which names the cycle
    assert len(order) >= len(LEVELS)


def test_the_core_imports_arrays_and_itself_only() -> None:
    """numpy, scipy, cv2 and pure standard modules; no thread, clock, file, socket, log or database can come in."""
    wrong = []
    for path in core_modules():
        for name, line in imports(parse(path)):
            root = name.split(".")[0]
            if path.parent == COMPILED and root in ("ctypes", "pathlib"):
                continue
            if root not in ("numpy", "scipy", "cv2", "edgewatch") and not PURE.fullmatch(root):
                wrong.append(f"{where(path, line)}: {name}")
    assert wrong == []


def test_the_sight_works_without_scipy_stats() -> None:
    """It costs a second and tens of megabytes to import, and every picture has to pass here."""
    wrong = [
        where(path, line)
        for path in modules()
        if part_of(dotted(path)) == "sight"
        for name, line in imports(parse(path))
        if name.startswith("scipy.stats")
    ]
    assert wrong == []


def _last_name(node: ast.expr) -> str:
    return node.attr if isinstance(node, ast.Attribute) else node.id if isinstance(node, ast.Name) else ""


def test_the_core_opens_nothing_and_reads_no_clock() -> None:
    """No call in a core module has the name of one that reads or changes the world."""
    wrong = [
        f"{where(path, node.lineno)}: {_last_name(node.func)}"
        for path in core_modules()
        for node in ast.walk(parse(path))
        if path.parent != COMPILED and isinstance(node, ast.Call) and OUTSIDE.fullmatch(_last_name(node.func))
    ]
    assert wrong == []


def test_the_core_draws_no_random_number_of_its_own() -> None:
    """Random numbers come from a generator handed in, or from one made of a seed handed in."""
    wrong = []
    for path in core_modules():
        tree = parse(path)
        for node in ast.walk(tree):
            if isinstance(node, ast.Attribute) and _last_name(node.value) == "random":
                if node.attr not in ("Generator", "default_rng", "SeedSequence", "PCG64", "Philox"):
                    wrong.append(f"{where(path, node.lineno)}: random.{node.attr}")
            elif isinstance(node, ast.Call) and _last_name(node.func) in ("default_rng", "SeedSequence", "PCG64"):
                seeds = [part for part in node.args if not (isinstance(part, ast.Constant) and part.value is None)]
                if not seeds and not node.keywords:
                    wrong.append(f"{where(path, node.lineno)}: {_last_name(node.func)} without a seed")
    assert wrong == []


def test_the_core_keeps_no_state_in_modules() -> None:
    """No ``global`` statement: a value that changes lives in an object that somebody owns."""
    wrong = [
        where(path, node.lineno)
        for path in core_modules()
        for node in ast.walk(parse(path))
        if isinstance(node, ast.Global)
    ]
    assert wrong == []


def test_only_commands_print() -> None:
    """Anybody else returns what it has to say, or raises it."""
    wrong = [
        where(path, node.lineno)
        for path in modules()
        if part_of(dotted(path)) != "commands"
        for node in ast.walk(parse(path))
        if (isinstance(node, ast.Call) and _last_name(node.func) == "print")
        or (isinstance(node, ast.Attribute) and node.attr in ("stdout", "stderr") and _last_name(node.value) == "sys")
    ]
    assert wrong == []


def test_runtime_dependencies_are_exactly_six() -> None:
    """The station runs on a small board: what it needs is counted."""
    project = tomllib.loads((TOP / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    named = {re.split(r"[^A-Za-z0-9-]", text, maxsplit=1)[0] for text in project["dependencies"]}
    assert named == set(DISTRIBUTIONS)
    assert set(project["optional-dependencies"]) == {"test", "desk", "audit"}


def test_the_package_imports_nothing_beyond_its_dependencies() -> None:
    """Standard modules and the six; desk work (plots) only inside functions of commands, when it is asked for."""
    known = sys.stdlib_module_names | set(DISTRIBUTIONS.values()) | {"edgewatch", "tomllib"}
    wrong = []
    for path in modules():
        tree = parse(path)
        functions = [node for node in ast.walk(tree) if isinstance(node, ast.FunctionDef)]
        inside = {line for function in functions for _, line in imports(function)}
        for name, line in imports(tree):
            root = name.split(".")[0]
            desk = root == "matplotlib" and part_of(dotted(path)) == "commands" and line in inside
            if root not in known and not desk:
                wrong.append(f"{where(path, line)}: {name}")
    assert wrong == []


def test_the_top_level_is_short() -> None:
    """README, DEVELOPERS, pyproject and four folders; the rest begins with a dot."""
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "edgewatch", "tests", "deploy", "calib"}
    found = {path.relative_to(TOP).parts[0] for path in tracked()}
    assert {name for name in found if not name.startswith(".")} == allowed


def test_no_file_is_large_or_generated() -> None:
    """Nothing that a build, a test or a run leaves behind, and nothing that makes a clone slow."""
    made = ("*.pyc", "*.so", "*.bin", "*.whl", "*.egg-info", "*.sqlite*", "*.log", "*.avi", "*.mkv", "*.mp4", "*.npz")
    wrong = [
        str(path.relative_to(TOP))
        for path in tracked()
        if path.stat().st_size > LARGEST_FILE or any(fnmatch.fnmatch(path.name, rule) for rule in made)
    ]
    assert wrong == []


def test_modules_stay_readable() -> None:
    """A module holds one idea, in lines that can be read in one sitting; weights that were learnt are not read."""
    wrong = {
        str(path.relative_to(TOP)): lines
        for path in modules()
        if not path.name.endswith("_weights.py")
        and (lines := len(path.read_text(encoding="utf-8").splitlines())) > LONGEST_MODULE
    }
    assert wrong == {}


def test_no_file_names_a_machine() -> None:
    """No home or working folder of whoever wrote it, and no package index by host: both differ elsewhere."""
    machine = re.compile(
        r"(?<![\w.])/(?:home|root|Users|wor[k]|far[m])/|/tm[p]/\w+_jobs|"
        r"\b(?:py[p]i\.org|(?:\w+\.)?pythonhoste[d]\.org|de[b]\.debian\.org|npm[j]s\.(?:org|com))"
    )
    wrong = []
    for path in tracked():
        try:
            text = path.read_text(encoding="utf-8")
        except UnicodeDecodeError:
            continue  # a picture
        lines = enumerate(text.splitlines(), start=1)
        wrong += [f"{where(path, number)}: {line.strip()[:80]}" for number, line in lines if machine.search(line)]
    assert wrong == []


def test_the_tests_mirror_the_package() -> None:
    """Whoever changes a part finds its tests under the same name."""
    folders = {path.name for path in (TOP / "tests").iterdir() if path.is_dir() and not path.name.startswith("__")}
    parts = {path.name for path in PACKAGE.iterdir() if path.is_dir() and not path.name.startswith("__")}
    assert parts <= folders
    assert folders - parts <= {"published", "bench"}


def test_no_test_is_switched_off() -> None:
    """A test that is skipped or expected to fail says nothing."""
    switched_off = re.compile(r"mark\.(?:ski[p]|xfai[l])|\bpytest\.(?:ski[p]|xfai[l]|importorski[p])\(")
    wrong = [
        where(path, number)
        for path in (TOP / "tests").rglob("*.py")
        for number, line in enumerate(path.read_text(encoding="utf-8").splitlines(), start=1)
        if switched_off.search(line)
    ]
    assert wrong == []


@pytest.mark.parametrize("script", ["first-run.sh", "run-tests.sh", "prepare.sh"])
def test_the_scripts_are_plain_shell(script: str) -> None:
    """They parse as POSIX shell: a fresh Debian has dash."""
    subprocess.run(["sh", "-n", str(TOP / "deploy" / script)], check=True)


def test_the_check_of_every_change_runs_the_tests() -> None:
    """.ci/run does what a developer does."""
    assert "sh deploy/run-tests.sh" in (TOP / ".ci" / "run").read_text(encoding="utf-8")
