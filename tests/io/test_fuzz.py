"""Damaged files of every format, and damaged cases: one line and exit 2, or a whole answer; never anything else."""

import json
import os
import random
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest
from fuzz_corpus import corpus, mutated
from fuzz_run import MOST_BYTES
from hypothesis import given
from hypothesis import strategies as st

from daraf.bem.errors import InputError
from daraf.io.bodies import read_bodies
from daraf.io.case import make_case
from daraf.io.names import printable

FOLDER = Path(__file__).parents[1]
FILES = corpus()


def fuzzed(seed, count, *names):
    """What a process of its own found wrong with so many damaged files."""
    words = [sys.executable, str(FOLDER / "fuzz_run.py"), str(seed), str(count), *names]
    held = os.environ | {"PYTHONHASHSEED": "0"}
    done = subprocess.run(words, cwd=FOLDER, env=held, capture_output=True, text=True, check=True)
    return json.loads(done.stdout)


def check(found):
    assert found["wrong"] == []
    assert found["peak"] < MOST_BYTES
    assert found["ends"]["refused"] > 0


def test_damaged_files_are_refused_in_one_line_or_read():
    check(fuzzed(1, 500))


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(2, 7))
def test_many_damaged_files(seed):
    check(fuzzed(seed, 4000))


@pytest.mark.slow
def test_damaged_step_files():
    pytest.importorskip("cascadio")
    check(fuzzed(7, 60, "rig.step"))


@pytest.mark.parametrize("name", [name for name in FILES if name not in ("case.toml", "rig.step")])
def test_the_corpus_itself_is_valid(tmp_path, name):
    path = tmp_path / name
    path.write_bytes(FILES[name])
    carries = name.endswith((".glb", ".gltf", ".3mf"))
    assert read_bodies(path, None if carries else "mm")


@pytest.mark.parametrize("name", [name for name in FILES if name not in ("case.toml", "rig.step")])
@given(share=st.floats(0.0, 1.0, exclude_max=True))
def test_no_part_of_a_file_is_taken_for_the_whole(tmp_path_factory, name, share):
    path = tmp_path_factory.mktemp("cut") / name
    data = FILES[name]
    path.write_bytes(data)
    unit = None if name.endswith((".glb", ".gltf", ".3mf")) else "mm"
    whole = [(body.name, len(body.triangles)) for body in read_bodies(path, unit)]
    path.write_bytes(data[: int(share * len(data))])
    try:
        cut = [(body.name, len(body.triangles)) for body in read_bodies(path, unit)]
    except InputError:
        return
    # OBJ counts nothing: a file that ends after a whole face cannot be told from a shorter one
    assert cut == whole or name.endswith(".obj")


@given(st.integers(0, 2**32), st.sampled_from(sorted(FILES)))
def test_mutations_are_the_same_for_the_same_seed(seed, name):
    others = list(FILES.values())
    once, again = (mutated(random.Random(seed), name, FILES[name], others) for _ in range(2))
    assert once == again


_VALUES = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.text(max_size=12)
    | st.sampled_from(["5 mm", "1e400 V", "%"]),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=6), inner, max_size=3),
    max_leaves=6,
)


@given(st.data())
def test_cases_with_any_value_anywhere(data):
    case = tomllib.loads(FILES["case.toml"].decode())
    table = data.draw(st.sampled_from([case, case["medium"], *case["conductor"], case["conductor"][1]["part"][0]]))
    key = data.draw(st.sampled_from([*sorted(table), "facet_tolerance", "want", "facets"]) | st.text(max_size=6))
    table[key] = data.draw(_VALUES)
    line = ""
    try:
        assert make_case(case, folder=".").content.conductor
    except InputError as error:
        line = str(error)
    assert "\n" not in line
    assert len(line) < 2000


@given(st.text())
def test_names_become_printable(text):
    name = printable(text)
    assert name == "" or name.isprintable()
    assert len(name) <= 60
    assert printable(name) == name
