"""The netlist: what it says, and what a real circuit simulator makes of it."""

import json
import re
import shutil
import subprocess

import numpy as np
import pytest

from daraf.bem.errors import InputError
from daraf.bem.terminals import terminals
from daraf.io.cli.main import main
from daraf.io.netlist import legal_names, netlist

ngspice = pytest.mark.skipif(shutil.which("ngspice") is None, reason="needs ngspice, which .ci/run installs")

#: omega = 1e9: femtofarads give currents far above what the simulator rounds off.
HERTZ = 1e9 / (2.0 * np.pi)
#: Names that no netlist may take over as they are.
NAMES = ("drive pad", "sense", "3rd", "SENSE", "a\n.end", "gnd")


def network(names=NAMES, seed=7, spread=1e-3):
    rng = np.random.default_rng(seed)
    n = len(names)
    mutual = 10.0 ** rng.uniform(-16, -12, (n, n))
    mutual = np.triu(mutual) + np.triu(mutual, 1).T
    C = -mutual
    C[np.diag_indices(n)] = mutual.sum(axis=1)
    return terminals(names, C, spread * np.abs(C), to_infinity_uncertainty=spread * np.diag(mutual))


def simulate(tmp_path, deck):
    file = tmp_path / "deck.cir"
    file.write_text(deck)
    done = subprocess.run(["ngspice", "-b", str(file)], capture_output=True, text=True, timeout=60, check=False)
    assert "rror" not in done.stdout + done.stderr, done.stdout + done.stderr
    return done.stdout


def measured_matrix(tmp_path, made, *, corner=0):
    """Maxwell matrix by AC analysis: one pin at 1 V, the others at 0 V, all currents read."""
    n = len(made.pins)
    found = np.empty((n, n))
    nodes = " ".join(f"p{i}" for i in range(n))
    for j in range(n):
        sources = "\n".join(f"V{i} p{i} 0 dc 0 ac {1 if i == j else 0}" for i in range(n))
        prints = "\n".join(f"print imag(i(v{i}))" for i in range(n))
        deck = (
            f"matrix\n{made.text}\n{sources}\nX1 {nodes} {made.subcircuit} corner={corner}\n"
            f".control\nset numdgt=12\nac lin 1 {HERTZ:.15g} {HERTZ:.15g}\n{prints}\n.endc\n.end\n"
        )
        text = simulate(tmp_path, deck)
        values = dict(re.findall(r"imag\(i\(v(\d+)\)\) = (\S+)", text))
        # the simulator counts current into the source's plus pin
        found[:, j] = [-float(values[str(i)]) / 1e9 for i in range(n)]
    return found


@ngspice
def test_ac_run_recovers_every_entry(tmp_path):
    net = network()
    found = measured_matrix(tmp_path, netlist(net))
    assert np.abs(found / net.maxwell - 1.0).max() < 1e-6


@ngspice
@pytest.mark.parametrize("corner", [-1, 1])
def test_corners_move_every_capacitor_by_its_uncertainty(tmp_path, corner):
    net = network(NAMES[:3])
    found = measured_matrix(tmp_path, netlist(net), corner=corner)
    assert found[0, 1] == pytest.approx(net.maxwell[0, 1] * (1 + 1e-3 * corner), rel=1e-6)
    assert found.sum(axis=1) == pytest.approx(net.to_infinity * (1 + 1e-3 * corner), rel=1e-5)


@ngspice
def test_dropping_keeps_the_total_capacitance_of_every_pin(tmp_path):
    net = network()
    made = netlist(net, drop=0.02)
    assert made.dropped > 0
    found = measured_matrix(tmp_path, made)
    assert np.diag(found) == pytest.approx(np.diag(net.maxwell), rel=1e-6)
    gone = np.triu(np.abs(found) < 1e-9 * np.abs(net.maxwell), 1)
    assert gone.sum() == made.dropped
    assert -net.maxwell[gone].sum() == pytest.approx(made.dropped_sum, rel=1e-9)


@ngspice
def test_charge_step_raises_the_potentials_of_the_elastance_matrix(tmp_path):
    net = network(NAMES[:4])
    made = netlist(net, reference_pin=True)
    assert made.pins[-1] == "ref"
    nodes = " ".join(f"p{i}" for i in range(4))
    # 1 pC in a microsecond onto the first pin; all other pins hang free
    deck = (
        f"step\n.options reltol=1e-6 rshunt=1e18 vntol=1e-9 abstol=1e-18\n{made.text}\nX1 {nodes} 0 {made.subcircuit}\n"
        "I1 0 p0 pwl(0 0 1n 1u 1u 1u 1.001u 0)\n.tran 1n 3u 0 1n uic\n"
        ".control\nset numdgt=12\nrun\n"
        + "\n".join(f"print v(p{i})[length(v(p{i}))-1]" for i in range(4))
        + "\n.endc\n.end\n"
    )
    values = re.findall(r"v\(p(\d)\)\[.*?\] = (\S+)", simulate(tmp_path, deck))
    P, _ = net.elastance()
    found = np.array([float(value) for _, value in values])
    # the integration of the pulse's two ramps is good to some 1e-5
    assert found == pytest.approx(P[:, 0] * 1e-12, rel=1e-4)


def test_names_are_legal_different_and_told():
    words = legal_names(NAMES)
    assert words == ("drive_pad", "sense", "n_3rd", "SENSE_2", "a_end", "gnd_2")
    text = netlist(network()).text
    assert "'drive pad'" in text
    assert not re.search(r"^\.end$", text, re.MULTILINE)
    assert text.isascii()
    assert max(map(len, text.splitlines())) < 200


def test_long_pin_lists_are_continued():
    text = netlist(network([f"conductor_number_{i}" for i in range(30)])).text
    card = text[text.index(".subckt") :].split("\n")
    assert card[1].startswith("+ ")


def test_negative_within_noise_is_zero_and_told():
    C = np.array([[2.0, 1e-6], [1e-6, 3.0]]) * 1e-12
    text = netlist(terminals(("a", "b"), C, np.full((2, 2), 1e-17))).text
    assert "came out negative" in text
    assert "C_a__b" not in text


def test_share_is_checked():
    with pytest.raises(InputError, match="from 0 to below 1"):
        netlist(network(), drop=1.0)


@pytest.fixture
def folder(tmp_path):
    net = network(("drive", "sense", "guard"))
    place = tmp_path / "head.daraf"
    place.mkdir()
    document = {
        "daraf": "0",
        "title": "head",
        "conductors": list(net.names),
        "inputs": [{"file": "a.stl", "sha256": "0" * 64, "bytes": 1}],
        "warnings": [{"code": "x", "text": "mind\nthe gap"}],
        "capacitance": {
            "maxwell": net.maxwell.tolist(),
            "maxwell_uncertainty": net.uncertainty.tolist(),
            "to_infinity_uncertainty": net.to_infinity_uncertainty.tolist(),
        },
    }
    (place / "result.json").write_text(json.dumps(document))
    return place


def test_command_writes_beside_the_result(folder, capsys):
    assert main(["netlist", str(folder)]) == 0
    assert f"netlist: {folder.with_suffix('.cir')}" in capsys.readouterr().out
    text = folder.with_suffix(".cir").read_text()
    assert ".subckt head drive sense guard corner=0" in text
    assert "* warning (x): mind?the gap" in text


def test_command_reduces_before_it_writes(folder, capsys):
    words = ["--join", "pair=drive,sense", "--float", "guard", "--out", "-"]
    assert main(["netlist", str(folder), *words]) == 0
    out = capsys.readouterr().out
    assert ".subckt head pair corner=0" in out
    assert "reductions: joined pair=drive,sense; float guard" in out
    assert not folder.with_suffix(".cir").exists()


def test_command_prints_numbers(folder, capsys):
    assert main(["netlist", str(folder), "--between", "drive,sense", "--others", "guarded"]) == 0
    assert capsys.readouterr().out.startswith("drive - sense, others guarded: ")
    assert main(["netlist", str(folder), "--modes", "drive,sense", "--elastance"]) == 0
    out = capsys.readouterr().out
    assert "differential" in out
    assert "guard - guard: " in out


@pytest.mark.parametrize(
    ("words", "complaint"),
    [
        (["--drop", "much"], "write a share"),
        (["--drop", "100%"], "below 100 %"),
        (["--join", "a,b"], "write NEW=A,B"),
        (["--join", "x=drive,nobody"], "no terminal 'nobody'"),
        (["--between", "drive"], "name two conductors"),
        (["--out", "/nowhere/x.cir"], "cannot be written"),
        (["--modes", "drive,sense", "--others", "guarded"], "floating or earthed"),
    ],
)
def test_command_refuses_in_one_line(folder, capsys, words, complaint):
    assert main(["netlist", str(folder), *words]) == 2
    err = capsys.readouterr().err
    assert complaint in err
    assert err.count("\n") == 1
    assert not list(folder.parent.glob("*.part"))
