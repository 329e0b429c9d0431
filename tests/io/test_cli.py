"""The command line in this process: output, exit codes, nothing written on failure."""

import errno
import json
import os
import signal
import subprocess
import sys

import pytest
from sample_solution import ascii_stl, sample_solution

import daraf.bem
from daraf.io import read_result
from daraf.io.cli import main
from daraf.io.cli.solve import _limit_threads

CASE = """\
title = "Two boxes"
unit = "mm"
[[conductor]]
name = "drive"
surface = "head.stl"
body = "drive"
potential = "20 kV"
[[conductor]]
name = "sense"
surface = "head.stl"
body = "sense"
charge = 0
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "head.stl").write_text(ascii_stl("drive") + ascii_stl("sense", shift=(3, 0, 0)))
    (tmp_path / "probe.toml").write_text(CASE)
    return tmp_path


@pytest.fixture
def solver(monkeypatch):
    """Stands for the real solver, which has its own tests; remembers how it was called."""
    calls = []

    def solve(surface, *, relative_permittivity, accuracy, memory_limit, facets, method, want, rounding, progress):
        calls.append({"accuracy": accuracy, "memory_limit": memory_limit, "facets": facets, "method": method})
        progress("assembling", 0, 10)
        progress("assembling", 10, 10, "one pass")
        reached = accuracy >= 1e-3
        return sample_solution(surface, relative_permittivity=relative_permittivity, accuracy=accuracy, reached=reached)

    monkeypatch.setattr(daraf.bem, "solve_capacitance", solve, raising=False)
    return calls


def test_solve_a_case(folder, solver, capsys):
    assert main(["solve", str(folder / "probe.toml")]) == 0
    out, err = capsys.readouterr()
    assert out.startswith("Two boxes\n2 conductors")
    assert out.endswith(f"\nresult: {folder / 'probe.daraf'}\n")
    assert "1 drive  20 kV" in out
    # stages that follow within seconds are not worth a line; on a busy machine some take longer
    assert err.splitlines()[0] == "assembling"
    assert len(err.splitlines()) <= 3
    result = read_result(folder / "probe.daraf")
    assert result.document["conductors"] == ["drive", "sense"]
    assert result.document["inputs"][0]["file"] == "head.stl"
    assert result.document["case"]["conductor"][0]["potential"] == "20 kV"
    assert result.surface.densities.shape == (2, 24)
    # Charge of the stated excitation: the potentials times the unit densities, integrated.
    charge = result.document["charge"]["value"]
    for index in range(2):
        mine = result.surface.conductor == index
        assert result.surface.density[mine].sum() * 0.5e-6 == pytest.approx(charge[index], abs=1e-15)
    assert "assembling" in result.log
    assert "Maxwell capacitance matrix" in result.log
    assert solver == [{"accuracy": 0.01, "memory_limit": None, "facets": "auto", "method": "auto"}]


def test_solve_surface_files(folder, solver, capsys):
    assert main(["solve", str(folder / "head.stl"), "--unit", "mm", "--accuracy", "0.5%", "-q"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert "1 drive" in out
    assert "Potentials" not in out
    assert (folder / "head.daraf" / "result.json").exists()
    assert solver[0]["accuracy"] == 0.005


def test_json_and_out(folder, solver, capsys):
    assert main(["solve", str(folder / "probe.toml"), "--json", "--out", str(folder / "x.daraf")]) == 0
    out, err = capsys.readouterr()
    assert json.loads(out) == read_result(folder / "x.daraf").document
    assert err.endswith(f"result: {folder / 'x.daraf'}\n")


def test_accuracy_not_reached_is_3_and_still_written(folder, solver, capsys):
    assert main(["solve", str(folder / "probe.toml"), "--accuracy", "0.01 %"]) == 3
    assert "NOT reached" in capsys.readouterr().out
    assert (folder / "probe.daraf" / "result.json").exists()


def test_inspect_takes_a_case(folder, capsys):
    """The bodies that the case uses, where it puts them."""
    (folder / "probe.toml").write_text(CASE.replace('body = "sense"', 'body = "sense"\nshift = "4 0 0 mm"'))
    assert main(["inspect", str(folder / "probe.toml")]) == 0
    out, _ = capsys.readouterr()
    assert "2 bodies" in out
    assert "6 mm" in out  # the gap of 2 mm, and the shift
    assert "lengths in mm" in out
    assert main(["inspect", str(folder / "probe.toml"), str(folder / "head.stl")]) == 2
    assert "stands alone" in capsys.readouterr().err
    assert main(["inspect", str(folder / "probe.toml"), "--unit", "mm"]) == 2
    assert "states its unit itself" in capsys.readouterr().err


@pytest.mark.slow
@pytest.mark.parametrize("signals", [1, 2])
def test_a_real_interruption_keeps_the_last_finished_pass(tmp_path, signals):
    """SIGINT in the middle of a long solve: exit 130, a whole result with its honest uncertainty."""
    (tmp_path / "head.stl").write_text(ascii_stl("drive") + ascii_stl("sense", shift=(1.01, 0, 0)))
    words = ["solve", "head.stl", "--unit", "mm", "--accuracy", "0.0002 %", "--threads", "1"]
    code = f"import sys; from daraf.io.cli import main; sys.exit(main({words!r}))"
    with subprocess.Popen(
        [sys.executable, "-c", code], cwd=tmp_path, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    ) as process:
        for line in process.stderr:
            if line.startswith("pass 4,"):
                break
        for _ in range(signals):
            process.send_signal(signal.SIGINT)
        out, err = process.communicate(timeout=120)
    assert process.returncode == 130, err
    assert "Traceback" not in err
    assert "interrupted" in out or "interrupted" in err
    if signals == 1:
        document = read_result(tmp_path / "head.daraf").document
        assert document["solution"]["interrupted"]
        assert document["solution"]["passes"] >= 4
        last = document["solution"]["history"][-1]
        spread = document["capacitance"]["maxwell_uncertainty"]
        assert spread[0][0] > 0.0
        assert last["uncertainty"] > 2e-6
    assert not list(tmp_path.glob(".*"))


def test_schema(capsys):
    assert main(["solve", "--schema"]) == 0
    assert json.loads(capsys.readouterr().out)["title"] == "daraf case file"


def test_version_and_help(capsys):
    assert main(["--version"]) == 0
    assert capsys.readouterr().out.startswith("daraf ")
    assert main(["--help"]) == 0
    assert "inspect" in capsys.readouterr().out
    assert main(["solve", "--help"]) == 0
    assert "--accuracy" in capsys.readouterr().out


BAD = [
    ([], "name a command"),
    (["sovle"], "did you mean solve?"),
    (["solve"], "name a case file or surface files"),
    (["solve", "probe.toml", "--acuracy", "1%"], "did you mean --accuracy?"),
    (["solve", "probe.toml", "--acc", "1%"], "unknown argument --acc"),
    (["solve", "probe.toml", "--unit", "mm"], "--unit is for surface files"),
    (["solve", "probe.toml", "head.stl"], "a case file stands alone"),
    (["solve", "probe.toml", "--threads", "0"], "no whole number from 1"),
    (["solve", "probe.toml", "--accuracy", "1"], "outside"),
    (["solve", "probe.toml", "--accuracy", "good"], "does not start with a number"),
    (["solve", "probe.toml", "--out", "missing/x.daraf"], "does not exist; create it"),
    (["solve", "probe.toml", "--out", "head.stl"], "no result of daraf, so it is not replaced"),
    (["solve", "none.toml"], "none.toml: no such file"),
    (["solve", "none.stl", "--unit", "mm"], "none.stl"),
    (["solve", ".", "--unit", "mm"], "is a folder"),
    (["solve", "head.stl"], "head.stl"),
    (["solve", "head.stl", "--unit", "parsec"], "parsec"),
    (["inspect"], "FILE"),
    (["inspect", "none.stl"], "none.stl"),
]


@pytest.mark.parametrize(("words", "expected"), BAD, ids=[" ".join(row[0]) or "nothing" for row in BAD])
def test_bad_input_is_one_line_exit_2_and_nothing_written(folder, solver, capsys, monkeypatch, words, expected):
    monkeypatch.chdir(folder)
    before = sorted(os.listdir(folder))
    assert main(words) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith("daraf: ")
    assert err.count("\n") == 1
    assert expected in err
    assert sorted(os.listdir(folder)) == before
    assert solver == []


def failing(monkeypatch, error):
    def solve(*_, **__):
        raise error

    monkeypatch.setattr(daraf.bem, "solve_capacitance", solve, raising=False)


def test_ctrl_c(folder, capsys, monkeypatch):
    failing(monkeypatch, KeyboardInterrupt())
    assert main(["solve", str(folder / "probe.toml")]) == 130
    assert capsys.readouterr().err == "daraf: interrupted; no half-written result is left\n"
    assert sorted(os.listdir(folder)) == ["head.stl", "probe.toml"]


def test_ctrl_c_after_a_finished_pass_keeps_what_it_gave(folder, capsys, monkeypatch):
    def solve(surface, *, accuracy, **_):
        return sample_solution(surface, accuracy=accuracy, reached=False, interrupted=True)

    monkeypatch.setattr(daraf.bem, "solve_capacitance", solve, raising=False)
    assert main(["solve", str(folder / "probe.toml")]) == 130
    assert "when the solve was interrupted" in capsys.readouterr().out
    assert read_result(folder / "probe.daraf").document["solution"]["interrupted"]


def test_a_defect_is_one_line(folder, capsys, monkeypatch, tmp_path):
    failing(monkeypatch, RuntimeError("odd\nnumber"))
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    assert main(["solve", str(folder / "probe.toml")]) == 1
    err = capsys.readouterr().err
    assert err.startswith("daraf: defect of daraf, please report it: RuntimeError: odd number")
    assert err.count("\n") == 1
    assert main(["solve", str(folder / "probe.toml"), "--debug"]) == 1
    assert "traceback in " in capsys.readouterr().err
    written = next(tmp_path.glob("daraf-defect-*.txt")).read_text()
    assert "Traceback (most recent call last)" in written


def test_out_of_memory(folder, capsys, monkeypatch):
    failing(monkeypatch, MemoryError())
    assert main(["solve", str(folder / "probe.toml")]) == 2
    assert "not enough memory" in capsys.readouterr().err


def test_output_to_a_full_disk_is_one_line(folder, solver, capsys, monkeypatch):
    def full(_text):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(sys.stdout, "write", full)
    assert main(["solve", str(folder / "probe.toml"), "-q"]) == 2
    assert capsys.readouterr().err == (
        "daraf: the output cannot be printed, the disk is full; free space or send it elsewhere\n"
    )


def test_help_loads_nothing_heavy():
    code = (
        "import sys\nfrom daraf.io.cli import main\nmain(['--help'])\n"
        "named = 'numba vtkmodules pint trimesh numpy scipy pydantic rich'.split()\n"
        "heavy = set(named) & set(sys.modules)\n"
        "sys.exit(f'loaded {heavy}' if heavy else 0)\n"
    )
    subprocess.run([sys.executable, "-c", code], check=True, stdout=subprocess.DEVNULL)


def test_threads_limit_what_is_loaded_later(monkeypatch):
    monkeypatch.delitem(sys.modules, "numpy")
    monkeypatch.delitem(sys.modules, "numba", raising=False)
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS"):
        monkeypatch.setenv(name, "7")
    _limit_threads(1)
    assert os.environ["OMP_NUM_THREADS"] == os.environ["NUMBA_NUM_THREADS"] == "1"


def test_the_same_job_in_python(folder, solver):
    from daraf.io import load_case, solve_case

    outcome = solve_case(load_case(folder / "probe.toml"), accuracy=0.02)
    assert outcome.document["solution"]["accuracy"] == 0.02
    assert "Mutual capacitances" in outcome.text()
    assert read_result(outcome.write(folder / "py.daraf")).document == outcome.document


def test_door_is_sorted_and_complete():
    import daraf.io

    assert daraf.io.__all__ == sorted(daraf.io.__all__)
    for name in daraf.io.__all__:
        assert getattr(daraf.io, name).__name__ == name
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = daraf.io.nothing
