"""Run as a program: damaged files through the command line, in this process; prints what went wrong as JSON.

Arguments: a seed and a number of files, then the names of the files of the corpus to damage (all by default).
"""

import contextlib
import io
import json
import os
import random
import resource
import signal
import sys
import tempfile
from pathlib import Path

from fuzz_corpus import corpus, mutated

from daraf.io.cli import main

#: Seconds that one file may take, and bytes that the process may ever hold.
SECONDS = 10
MOST_BYTES = 2 * 2**30

#: A file for the kernel takes a process of its own, so one in so many of the others.
STEP_SHARE = 0.004


def run(seed, count, names):
    """Complaints: dictionaries of number, file and what."""
    rng = random.Random(seed)
    files = corpus()
    others = [content for name, content in files.items() if name != "rig.step"]
    chosen = [name for name in files if name in names] if names else [name for name in files if name != "rig.step"]
    wrong, ends = [], {}
    signal.signal(signal.SIGALRM, _too_long)
    with tempfile.TemporaryDirectory() as folder:
        (Path(folder) / "two.stl").write_bytes(files["two.stl"])
        for number in range(count):
            name = rng.choice(chosen) if names or rng.random() > STEP_SHARE else "rig.step"
            path = Path(folder) / ("damaged." + name.partition(".")[2])
            path.write_bytes(mutated(rng, name, files[name], others))
            end, what = _tried(path)
            ends[end] = ends.get(end, 0) + 1
            if what:
                keep = Path(tempfile.gettempdir()) / f"daraf-fuzz-{seed}-{number}-{path.name}"
                keep.write_bytes(path.read_bytes())
                wrong.append({"number": number, "file": str(keep), "what": what})
            path.unlink()
    return {"wrong": wrong, "ends": ends, "peak": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024}


def _too_long(*_):
    raise TimeoutError(f"took more than {SECONDS} s")


def _tried(path):
    """Exit code of the command line, and what is wrong with its end, if anything."""
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    out, err = io.StringIO(), io.StringIO()
    signal.alarm(SECONDS)
    try:
        with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
            code = _read(path)
    except TimeoutError as error:
        return "late", str(error)
    except BaseException as error:
        return "raised", f"{type(error).__name__}: {error}"
    finally:
        signal.alarm(0)
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    lines = err.getvalue().splitlines()
    if after > MOST_BYTES > before:
        return "large", f"took {after / 2**30:.2f} GiB"
    if code == 0:
        return "read", _whole(out.getvalue())
    if code != 2 or out.getvalue() or len(lines) != 1 or not lines[0].startswith("daraf: "):
        return "odd", f"exit {code}, out {out.getvalue()[:80]!r}, err {err.getvalue()[:400]!r}"
    if not lines[0].isprintable() or "Traceback" in lines[0]:
        return "odd", f"not printable: {lines[0][:300]!r}"
    return "refused", None


def _read(path):
    if path.suffix == ".toml":
        from daraf.bem.errors import InputError
        from daraf.io.case import load_case
        from daraf.io.problem import build_problem

        try:
            build_problem(load_case(path))
        except InputError as error:
            if "\n" in str(error) or not str(error).isprintable():
                raise AssertionError(f"not one printable line: {error!r}") from error
            sys.stderr.write(f"daraf: {error}\n")
            return 2
        sys.stdout.write("{}")
        return 0
    carries = path.name.endswith((".glb", ".gltf", ".3mf", ".step"))
    return main(["inspect", str(path), "--json", *([] if carries else ["--unit", "mm"])])


def _whole(text):
    """What is wrong with a JSON answer: it must be whole, and all of its numbers finite, or null."""

    def refuse(word):
        raise ValueError(word)

    try:
        found = json.loads(text, parse_constant=refuse)
    except ValueError as error:
        return f"no valid JSON: {error}"
    names = [body["name"] for body in found.get("bodies", [])]
    if any(not name or not name.isprintable() for name in names) or len(set(names)) < len(names):
        return f"names {names!r}"
    return None


if __name__ == "__main__":
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    print(json.dumps(run(int(sys.argv[1]), int(sys.argv[2]), sys.argv[3:])))  # noqa: T201
