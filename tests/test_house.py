"""The rules of the house: what a machine can check about the project as a whole."""

import importlib
import importlib.metadata
import inspect
import os
import re
import subprocess
import sys
import time
import tomllib
from pathlib import Path

import pytest
from numpydoc.validate import validate

ROOT = Path(__file__).parent.parent
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))
DOORS = ["daraf.bem", "daraf.io"]
SOURCES = sorted([*(ROOT / "bem").rglob("*.py"), *(ROOT / "io").rglob("*.py")])

# What numpydoc calls them: parameters missing (PR01), unknown (PR02), in another order (PR03), without type
# (PR04); summary missing (GL08, SS01); sections in the wrong order (GL07); unknown section (GL06).
DOCSTRING_RULES = {"GL06", "GL07", "GL08", "PR01", "PR02", "PR03", "PR04", "SS01"}


MODULES = [
    ".".join(("daraf", *path.relative_to(ROOT).with_suffix("").parts)).removesuffix(".__init__") for path in SOURCES
]


def in_order(names):
    """Sorted as the linter sorts: constants, classes, functions."""
    return sorted(names, key=lambda name: (not name.isupper(), not name[0].isupper(), name))


def described(field, record):
    return field.startswith("_") or re.search(rf"^\s*[\w, ]*\b{field}\b[\w, ]* :", record.__doc__ or "", re.MULTILINE)


def run_python(code, **environment):
    """Run code in a fresh interpreter, away from the sources, and return what it prints."""
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code],
        capture_output=True,
        text=True,
        cwd=ROOT / "tests",
        env=os.environ | environment,
        timeout=300,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


@pytest.mark.parametrize("door", DOORS)
def test_door_is_sorted_and_equals_what_is_visible(door):
    package = importlib.import_module(door)
    assert list(package.__all__) == in_order(package.__all__)
    visible = {name for name in dir(package) if not name.startswith("_")}
    visible -= {name for name in visible if inspect.ismodule(getattr(package, name))}
    assert visible == {name for name in package.__all__ if not name.startswith("_")}


@pytest.mark.parametrize("name", MODULES)
def test_all_of_each_module_is_sorted_and_true(name):
    module = importlib.import_module(name)
    assert hasattr(module, "__all__"), "every module says what it offers"
    assert list(module.__all__) == in_order(module.__all__)
    missing = [offered for offered in module.__all__ if not hasattr(module, offered)]
    assert not missing


@pytest.mark.parametrize("door", DOORS)
def test_docstrings_of_the_door_match_the_signatures(door):
    package = importlib.import_module(door)
    faults = []
    for name in package.__all__:
        if callable(getattr(package, name)):
            errors = validate(f"{door}.{name}")["errors"]
            # A record's fields are described once, as attributes: their names must stand there.
            fields = set(getattr(getattr(package, name), "__dataclass_fields__", {}))
            undescribed = {field for field in fields if not described(field, getattr(package, name))}
            rules = DOCSTRING_RULES - ({"PR01"} if fields else set())
            faults += [f"{name}: {code} {text}" for code, text in errors if code in rules]
            faults += [f"{name}: field {field} is not described" for field in sorted(undescribed)]
    assert not faults


def test_every_package_folder_is_installed():
    """A folder that is missing from the list of packages is missing from the wheel alone: nobody notices."""
    folders = {"daraf." + ".".join(path.parent.relative_to(ROOT).parts) for path in SOURCES}
    assert folders == set(PROJECT["tool"]["setuptools"]["packages"])


def test_version_equals_the_top_of_the_changelog():
    top = re.search(r"^## (\S+)", (ROOT / "CHANGELOG.md").read_text("utf-8"), re.MULTILINE).group(1)
    assert top == PROJECT["project"]["version"] == importlib.metadata.version("daraf")


def test_physics_knows_no_file_no_terminal_and_no_screen():
    lint = Path(sys.executable).with_name("lint-imports")
    if not lint.exists():
        pytest.skip("import-linter is not installed; scripts/check installs it")
    done = subprocess.run([lint, "--no-logo", "--no-cache"], cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stdout + done.stderr


def test_importing_the_physics_loads_nothing_that_faces_the_outside():
    """The contract reads sources; this looks at what really gets loaded."""
    loaded = run_python("import daraf.bem, sys; print(*sys.modules)").split()
    outside = {"daraf.io", "trimesh", "pyvista", "vtk", "vtkmodules", "typer", "rich", "pydantic", "pint"}
    assert not outside & set(loaded)


def test_no_source_is_too_long_and_the_physics_does_not_print():
    lengths = {path.relative_to(ROOT).as_posix(): len(path.read_text("utf-8").splitlines()) for path in SOURCES}
    assert not {name: n for name, n in lengths.items() if n > 500}
    printing = re.compile(r"^\s*(print\(|import logging$|sys\.exit\()", re.MULTILINE)
    assert not [p.name for p in (ROOT / "bem").rglob("*.py") if printing.search(p.read_text("utf-8"))]


def test_no_catch_all_modules():
    vague = {"utils", "helpers", "common", "misc", "tools"}
    assert not [path for path in SOURCES if path.stem in vague]


def test_no_place_of_one_machine_is_named():
    """Paths of a home folder or of the machine somebody worked on do not belong into the project."""
    tracked = [
        *SOURCES,
        *ROOT.glob("*.md"),
        *ROOT.glob("*.lock"),
        *ROOT.glob("scripts/*"),
        ROOT / ".ci" / "run",
    ]
    private = re.compile(r"(/(root|home/\w+)/|index-url|find-links (?!settings)|file://)")
    hits = {p.name: private.search(p.read_text("utf-8")) for p in tracked if p.is_file()}
    # scripts/lock switches such lines off, and has to name the options to do so.
    assert not {name: hit.group() for name, hit in hits.items() if hit and name != "lock"}


HELP = """
import sys
from daraf.io.cli import main
try:
    code = main(["--help"])
except SystemExit as end:
    code = end.code
assert not code, code
print(*sys.modules, file=sys.stderr)
"""


def test_help_loads_nothing_heavy():
    done = subprocess.run([sys.executable, "-c", HELP], capture_output=True, text=True, cwd=ROOT / "tests")
    assert done.returncode == 0, done.stderr
    for word in ("inspect", "solve"):
        assert word in done.stdout
    heavy = {"numba", "vtk", "vtkmodules", "pyvista", "pint", "trimesh", "scipy", "shapely"}
    assert not heavy & set(done.stderr.split())


def test_help_answers_quickly():
    command = Path(sys.executable).with_name("daraf")
    seconds = []
    for _ in range(3):
        start = time.perf_counter()
        subprocess.run([command, "--help"], check=True, capture_output=True)
        seconds.append(time.perf_counter() - start)
    # The promise is 0.5 s; the best of three because other work on the machine only ever adds time.
    assert min(seconds) < 0.5


INTERPRETED = """
import numpy as np
from daraf.bem import Surface, solve_capacitance
corners = np.array([[x, y, 0.0] for x in (0, 1) for y in (0, 1)])
surface = Surface(vertices=corners, triangles=np.array([[0, 2, 3], [0, 3, 1]]),
                  triangle_body=np.zeros(2, int), body_conductor=np.zeros(1, int),
                  body_names=("plate",), conductor_names=("plate",))
solution = solve_capacitance(surface, accuracy=0.2)
print(float(solution.maxwell[0, 0]))
"""


@pytest.mark.slow
def test_interpreted_kernels_give_the_compiled_numbers():
    """Index errors that compiled code hides show here."""
    interpreted = float(run_python(INTERPRETED, NUMBA_DISABLE_JIT="1"))
    compiled = float(run_python(INTERPRETED))
    # Same operations; only the order of additions in LAPACK and in fused operations may differ.
    assert interpreted == pytest.approx(compiled, rel=1e-12)


@pytest.mark.slow
def test_python_of_the_readme_runs(tmp_path):
    (block,) = re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text("utf-8"), re.DOTALL)
    assert len([line for line in block.splitlines() if line.strip()]) <= 10
    (tmp_path / "meshes").symlink_to(ROOT / "meshes")
    done = subprocess.run([sys.executable, "-c", block], cwd=tmp_path, capture_output=True, text=True, timeout=600)
    assert done.returncode == 0, done.stderr
    assert (tmp_path / "probe.daraf" / "result.json").exists()
    assert re.search(r"F \+- \S+ F$", done.stdout.strip())
