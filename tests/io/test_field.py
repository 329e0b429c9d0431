"""`daraf field`: places, tables, files and pictures; the physics has its own tests."""

import csv
import io

import numpy as np
import pytest
from sample_solution import ascii_stl, sample_solution

import daraf.bem
from daraf.bem.errors import InputError
from daraf.io import read_result
from daraf.io.charged_result import charged_result
from daraf.io.cli import main
from daraf.io.field_picture import round_levels
from daraf.io.places import box, parallelogram, parse_place, plane, points_from_file

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
ground = true
"""


@pytest.fixture(scope="module")
def result(tmp_path_factory):
    folder = tmp_path_factory.mktemp("field")
    (folder / "head.stl").write_text(ascii_stl("drive") + ascii_stl("sense", shift=(3, 0, 0)))
    (folder / "probe.toml").write_text(CASE)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(daraf.bem, "solve_capacitance", lambda surface, **_: sample_solution(surface))
        assert main(["solve", "-q", str(folder / "probe.toml")]) == 0
    return folder / "probe.daraf"


def rows(text):
    return list(csv.DictReader(io.StringIO(text)))


def test_points_are_told_in_the_unit_of_the_case(result, capsys):
    capsys.readouterr()
    assert main(["field", str(result), "--at", "0.5,0.5,0.5", "--at", "2,0.5,0.5", "-q"]) == 0
    inside, between = rows(capsys.readouterr().out)
    assert inside["metal"] == "drive"
    assert float(inside["potential_V"]) == 20e3
    assert float(inside["field_V_per_m"]) == 0.0
    assert between["metal"] == ""
    assert float(between["x_mm"]) == 2.0
    assert 0 < float(between["potential_V"]) < 20e3
    # from the box at 20 kV to the earthed one
    assert float(between["field_x_V_per_m"]) > 0
    assert float(between["field_uncertainty_V_per_m"]) > 0
    # another unit, the same place
    assert main(["field", str(result), "--at", "0.2,0.05,0.05", "--unit", "cm", "-q"]) == 0
    assert float(rows(capsys.readouterr().out)[0]["potential_V"]) == pytest.approx(float(between["potential_V"]))


def test_one_volt_and_given_potentials_superpose(result, capsys):
    found = []
    for state in (
        ["--conductor", "drive"],
        ["--conductor", "sense"],
        ["--potential", "drive=2 V", "--potential", "sense=3"],
    ):
        assert main(["field", str(result), "--at", "1.7,0.5,0.9", "-q", *state]) == 0
        found.append(rows(capsys.readouterr().out)[0])
    one, two, both = ([float(row["potential_V"]), float(row["field_z_V_per_m"])] for row in found)
    # the charge that is filled in is not linear in the potentials, but sample densities hold all of it
    np.testing.assert_allclose(2.0 * np.array(one) + 3.0 * np.array(two), both, rtol=1e-6)


def test_points_of_a_file_keep_their_other_columns(result, tmp_path, capsys):
    (tmp_path / "p.csv").write_text("# made by hand\nname;x;y;z\ntip;1.5;0.5;0.5\nback;-1;0.5;0.5\n")
    out = tmp_path / "f.csv"
    assert main(["field", str(result), "--points", str(tmp_path / "p.csv"), "--out", str(out), "-q"]) == 0
    tip, back = rows(out.read_text())
    assert (tip["name"], back["name"]) == ("tip", "back")
    assert float(tip["potential_V"]) > 0
    told = capsys.readouterr().out
    assert told.startswith("2 points, 0 of them in metal\npotential from ")
    assert f"written: {out}" in told


def test_a_plane_makes_image_data_and_a_picture(result, tmp_path):
    vti, png = tmp_path / "cut.vti", tmp_path / "cut.png"
    words = ["field", str(result), "--plane", "z=0.5", "--steps", "12", "--out", str(vti), "--picture", str(png), "-q"]
    assert main(words) == 0
    assert png.read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"
    from vtkmodules.util.numpy_support import vtk_to_numpy
    from vtkmodules.vtkIOXML import vtkXMLImageDataReader

    reader = vtkXMLImageDataReader()
    reader.SetFileName(str(vti))
    reader.Update()
    data = reader.GetOutput()
    assert data.GetDimensions()[2] == 1
    assert max(data.GetDimensions()) == 13
    volts = vtk_to_numpy(data.GetPointData().GetArray("potential"))
    state = charged_result(read_result(result))
    k = 20
    from daraf.bem.probing import probe

    assert volts[k] == pytest.approx(probe(state, [data.GetPoint(k)]).potential[0], rel=1e-12)


def test_sheet_box_and_lines(result, tmp_path, capsys):
    vts, vti, vtp = tmp_path / "a.vts", tmp_path / "a.vti", tmp_path / "a.vtp"
    assert (
        main(["field", str(result), "--sheet", "0,0,0", "1,1,0", "0,0,1", "--steps", "4", "--out", str(vts), "-q"]) == 0
    )
    assert main(["field", str(result), "--box", "3,3,3", "2,1,0", "--steps", "4", "--out", str(vti), "-q"]) == 0
    assert main(["field", str(result), "--trace", "1,0.5,0.5", "--trace", "2,0.5,0.5", "--out", str(vtp), "-q"]) == 0
    assert "field line 1: drive - sense, length 2" in capsys.readouterr().out
    assert all(b"</VTKFile>" in file.read_bytes() for file in (vts, vti, vtp))
    assert main(["field", str(result), "--line", "1.2,0.5,0.5", "2.8,0.5,0.5", "--steps", "8", "-q"]) == 0
    found = rows(capsys.readouterr().out)
    assert len(found) == 9
    assert float(found[-1]["distance_mm"]) == pytest.approx(1.6)
    assert main(["field", str(result), "--trace-peak", "drive", "-q"]) == 0
    assert rows(capsys.readouterr().out)[0]["line"] == "1"


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ([], "name where"),
        (["--at", "1,2"], "no place"),
        (["--at", "1,2,3", "--line", "0,0,0", "1,1,1"], "one kind"),
        (["--box", "0,0,0", "1,1,1"], "--out"),
        (["--box", "0,0,0", "1,1,0", "--out", "a.vti"], "enclose"),
        (["--box", "0,0,0", "1,1,1", "--out", "a.csv"], ".vti"),
        (["--plane", "w=1", "--out", "a.vti"], "such as z=2"),
        (["--at", "1,2,3", "--conductor", "nobody"], "no conductor is named 'nobody'"),
        (["--at", "1,2,3", "--potential", "drive=5 mm"], "voltage"),
        (["--at", "1,2,3", "--picture", "a.bmp"], ".png"),
        (["--line", "0,0,0", "0,0,0"], "two different"),
        (["--trace-peak", "nobody"], "peak field"),
        (["--points", "none.csv"], "cannot be read"),
    ],
)
def test_bad_requests_are_one_line(result, words, said, capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert main(["field", str(result), "-q", *words]) == 2
    told = capsys.readouterr()
    assert told.out == ""
    assert said in told.err
    assert told.err.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "no points"),
        ("a,b\n1,2\n", "names no columns"),
        ("x,y,z\n1,2,nan\n", "line 2"),
        ("x,y,z\n1,2\n", "line 2"),
        ("x,y,z\n", "below"),
    ],
)
def test_bad_files_of_points(text, said, tmp_path):
    (tmp_path / "p.csv").write_text(text)
    with pytest.raises(InputError, match=said):
        points_from_file(tmp_path / "p.csv", 1.0)


def test_points_without_a_header_and_with_units_in_it(tmp_path):
    (tmp_path / "p.csv").write_text("1 2 3\n4 5 6\n")
    assert points_from_file(tmp_path / "p.csv", 1e-3).points.tolist() == [[1e-3, 2e-3, 3e-3], [4e-3, 5e-3, 6e-3]]
    (tmp_path / "q.csv").write_text("z_mm,x_mm,y_mm\n3,1,2\n")
    assert points_from_file(tmp_path / "q.csv", 1.0).points.tolist() == [[1.0, 2.0, 3.0]]


def test_grids_run_along_their_first_direction():
    window = np.array([[0.0, 0.0, 0.0], [2.0, 9.0, 1.0]])
    made = plane("y", 5.0, window, 4)
    assert made.shape == (5, 3)
    assert made.axes == ("x", "z")
    assert made.points[:2].tolist() == [[0.0, 5.0, 0.0], [0.5, 5.0, 0.0]]
    assert made.points[-1].tolist() == [2.0, 5.0, 1.0]
    assert box(np.zeros(3), np.ones(3), 2).points[1].tolist() == [0.5, 0.0, 0.0]
    with pytest.raises(InputError, match="one line"):
        parallelogram(np.zeros(3), np.ones(3), 2 * np.ones(3), 4)
    with pytest.raises(InputError, match="too many"):
        box(np.zeros(3), np.ones(3), 1000)
    assert parse_place("1; 2,3", 2.0).tolist() == [2.0, 4.0, 6.0]


def test_round_levels():
    assert round_levels(0.3, 97.0, 5).tolist() == [20.0, 40.0, 60.0, 80.0]
    assert round_levels(-1e-3, 1e-3, 4).tolist() == [-5e-4, 0.0, 5e-4]
    assert len(round_levels(1.0, 1.0)) == 0
