"""The cache guard: compiled kernels are found again, and never after a source they depend on has changed."""

import os
import subprocess
import sys
import time

import numpy as np
import pytest
from numba.core import config

from daraf.bem import jit
from daraf.bem.errors import InputError
from daraf.bem.jit import kernel_source_hash, set_threads

SOURCES = {
    "jit.py": "doorway = 1",
    "constants.py": "SCALE = 1.0",
    "near.py": "from .constants import SCALE\nfrom .jit import kernel",
    "far.py": "from .jit import (\n    kernel,\n)\nfrom .near import x",
    "report.py": "from .far import y",
    "__init__.py": "from .jit import set_threads\nfrom .report import z",
}


@pytest.fixture
def package(tmp_path):
    for name, text in SOURCES.items():
        (tmp_path / name).write_text(text)
    return tmp_path


@pytest.mark.parametrize("name", ["jit.py", "constants.py", "near.py", "far.py"])
def test_hash_changes_with_each_source_a_kernel_depends_on(package, name):
    before = kernel_source_hash(package)
    (package / name).write_text(SOURCES[name] + "\n# edited")
    assert kernel_source_hash(package) != before


def test_hash_ignores_sources_no_kernel_can_see(package):
    before = kernel_source_hash(package)
    (package / "report.py").write_text("edited = True")
    assert kernel_source_hash(package) == before


@pytest.mark.parametrize(
    "line",
    [
        "from . import report",
        "from .report import z",
        "from daraf.bem.report import z",
        "import daraf.bem.report",
    ],
)
def test_hash_follows_every_way_to_import(package, line):
    (package / "near.py").write_text(SOURCES["near.py"] + "\n" + line)
    before = kernel_source_hash(package)
    (package / "report.py").write_text("edited = True")
    assert kernel_source_hash(package) != before


def test_hash_changes_with_a_new_compiler(package, monkeypatch):
    before = kernel_source_hash(package)
    monkeypatch.setattr("numba.__version__", "99.0")
    assert kernel_source_hash(package) != before


PROGRAM = """
import pathlib, sys
import numba.core.config as config
import daraf.bem.jit as jit
jit._SOURCES = pathlib.Path(sys.argv[1])
jit.cache_folder.cache_clear()  # daraf.bem has declared its own kernels already
sys.path.insert(0, sys.argv[1])
before = config.CACHE_DIR
from outer import outer
assert config.CACHE_DIR == before, "other packages' caching is left alone"
print(outer(1.0), sum(outer.stats.cache_hits.values()), jit.cache_folder())
"""


def run_outer(folder, home, **environment):
    """Run a kernel that calls a kernel of another file, as a package with those two sources would."""
    clean = {k: v for k, v in os.environ.items() if not k.startswith(("NUMBA_", "XDG_"))}
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM, str(folder)],
        env=clean | {"HOME": str(home), "TMPDIR": str(home)} | environment,
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    value, hits, place = done.stdout.split()
    return float(value), int(hits), place


@pytest.fixture
def two_files(tmp_path):
    folder = tmp_path / "sources"
    folder.mkdir()
    (folder / "inner.py").write_text("from daraf.bem.jit import kernel\n\n@kernel\ndef inner(x):\n    return x + 1.0\n")
    (folder / "outer.py").write_text(
        "from daraf.bem.jit import kernel\nfrom inner import inner\n\n@kernel\ndef outer(x):\n    return inner(x)\n"
    )
    (tmp_path / "home").mkdir()
    return folder, tmp_path / "home"


def test_an_edit_in_another_file_is_noticed(two_files):
    """The reason for the guard: numba alone would return 2 again after the edit."""
    folder, home = two_files
    assert run_outer(folder, home)[:2] == (2.0, 0)
    value, hits, place = run_outer(folder, home)
    assert (value, hits) == (2.0, 1)
    assert place.startswith(str(home / ".cache" / "daraf"))
    (folder / "inner.py").write_text((folder / "inner.py").read_text().replace("1.0", "2.0"))
    assert run_outer(folder, home)[:2] == (3.0, 0)


def test_an_explicit_cache_folder_is_respected(two_files, tmp_path):
    folder, home = two_files
    explicit = tmp_path / "explicit"
    assert run_outer(folder, home, NUMBA_CACHE_DIR=str(explicit))[2].startswith(str(explicit))
    assert not (home / ".cache").exists()


def test_without_a_writable_home_the_folder_for_temporary_files_serves(two_files, tmp_path):
    folder, _ = two_files
    blocked = tmp_path / "blocked"
    blocked.write_text("a file where a folder is needed stops even the superuser")
    temporary = tmp_path / "temporary"
    temporary.mkdir()
    for hits in (0, 1):
        found = run_outer(folder, blocked, TMPDIR=str(temporary))
        assert found[:2] == (2.0, hits)
        assert found[2].startswith(str(temporary / "daraf-"))


def test_a_folder_open_to_others_is_not_trusted(two_files, tmp_path):
    folder, _ = two_files
    blocked = tmp_path / "blocked"
    blocked.touch()
    trap = tmp_path / f"daraf-{os.getuid()}"
    trap.mkdir()
    trap.chmod(0o777)
    assert not run_outer(folder, blocked, TMPDIR=str(tmp_path))[2].startswith(str(trap) + os.sep)
    assert not list(trap.iterdir())


def test_with_no_writable_folder_kernels_still_run(monkeypatch):
    monkeypatch.setattr(jit, "cache_folder", lambda: None)

    @jit.kernel
    def twice(x):
        return 2.0 * x

    assert twice(1.5) == 3.0


def test_old_folders_are_removed_but_none_that_may_be_in_use(tmp_path):
    now = time.time()
    ages = {"kernels-a": 0, "kernels-b": 5, "kernels-c": 30, "kernels-d": 20, "kernels-e": 40, "other": 99}
    for name, hours in ages.items():
        (tmp_path / name).mkdir()
        os.utime(tmp_path / name, (now - 3600 * hours, now - 3600 * hours))
    jit._prune(tmp_path, keep=tmp_path / "kernels-e")
    assert {path.name for path in tmp_path.iterdir()} == {
        "kernels-a",
        "kernels-b",
        "kernels-d",
        "kernels-e",
        "other",
    }


def test_decorators_take_options_and_keep_the_project_s():
    @jit.parallel_kernel(boundscheck=True)
    def doubled(x):
        y = np.empty_like(x)
        for i in jit.prange(len(x)):
            y[i] = 2.0 * x[i]
        return y

    @jit.kernel
    def inverse(x):
        return 1.0 / x

    assert doubled(np.arange(3.0)).tolist() == [0.0, 2.0, 4.0]
    if not config.DISABLE_JIT:
        assert inverse(0.0) == np.inf  # error_model "numpy"
        assert doubled.targetoptions["nogil"]
        assert doubled.targetoptions["boundscheck"]
        assert not doubled.targetoptions["fastmath"]


def test_threads_are_set_within_what_the_machine_offers():
    offered = set_threads()
    assert set_threads(1) == 1
    assert set_threads() == offered
    for wrong in (0, offered + 1):
        with pytest.raises(InputError, match=f"threads: {wrong} asked for, this machine offers 1 to {offered}"):
            set_threads(wrong)
