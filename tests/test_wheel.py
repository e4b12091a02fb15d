"""The package as it is installed: a wheel built from the tree, imported without the tree."""

from __future__ import annotations

import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

TOP = Path(__file__).parents[1]

IMPORT_ALL = """
import importlib, pathlib, pkgutil, runpy, sys
folder = sys.argv[1]
sys.path.insert(0, folder)
import edgewatch
assert pathlib.Path(edgewatch.__file__).is_relative_to(folder), edgewatch.__file__
names = [info.name for info in pkgutil.walk_packages(edgewatch.__path__, "edgewatch.")]
names.remove("edgewatch.__main__")
for name in names:
    importlib.import_module(name)
print(len(names))
sys.argv = ["edgewatch", "--version"]
try:
    runpy.run_module("edgewatch", run_name="__main__")
except SystemExit as end:
    assert end.code == 0
"""


@pytest.fixture(scope="module")
def installed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the content of a wheel, as an installation lays it out."""
    made = tmp_path_factory.mktemp("wheel")
    build = ["pip", "wheel", "--quiet", "--no-deps", "--no-build-isolation", "--no-index", "--wheel-dir", str(made)]
    done = subprocess.run([sys.executable, "-m", *build, str(TOP)], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    (wheel,) = made.glob("*.whl")
    folder = made / "site"
    zipfile.ZipFile(wheel).extractall(folder)
    return folder


@pytest.mark.slow
def test_every_module_is_imported_without_the_tree(installed: Path, tmp_path: Path) -> None:
    """Nothing in the package leans on a file that stays behind in the repository."""
    command = [sys.executable, "-I", "-W", "error", "-c", IMPORT_ALL, str(installed)]
    done = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    count, version = done.stdout.split("\n", 1)
    ends = {TOP / "edgewatch" / name for name in ("__init__.py", "__main__.py")}
    assert int(count) == len(set((TOP / "edgewatch").rglob("*.py")) - ends)
    assert version.startswith("edgewatch ")


@pytest.mark.slow
def test_the_wheel_carries_what_the_station_reads(installed: Path) -> None:
    """Schemas, type marker, example optics and bands are in it; tests, guides and scripts are not."""
    package = installed / "edgewatch"
    data = {path.relative_to(TOP / "edgewatch") for path in (TOP / "edgewatch").rglob("*.json")} | {Path("py.typed")}
    assert {name for name in data if not (package / name).is_file()} == set()
    for example in (TOP / "calib").rglob("*.toml"):
        assert (package / "calib" / example.relative_to(TOP / "calib")).read_bytes() == example.read_bytes()
    assert (package / "calib" / "station.toml").is_file()
    assert {path.name for path in installed.iterdir()} == {
        "edgewatch",
        *(p.name for p in installed.glob("*.dist-info")),
    }
