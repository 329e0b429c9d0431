"""The result folder: whole or not at all."""

import errno
import json
import os
import resource
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

from daraf.bem.errors import InputError
from daraf.io import result as result_module
from daraf.io.result import check_destination, document_text, foreign_files, read_result, write_result
from daraf.io.surface_file import SolvedSurface, read_surface, surface_bytes

DOCUMENT = {
    "daraf": "0",
    "capacitance": {"maxwell": [[1.0, -0.5], [-0.5, 2.0]]},
    "force": None,
    "warnings": [],
}


@pytest.fixture
def surface():
    corners = np.array(
        [
            [[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0]],
            [[1, 0, 0], [2, 0, 0], [1, 1, 0], [1, 1, 0]],
            [[0, 0, 1], [1, 0, 1], [0, 1, 1], [0, 1, 1]],
        ],
        dtype=float,
    )
    return SolvedSurface(
        corners=corners,
        n_corners=np.array([4, 3, 3]),
        conductor=np.array([0, 0, 1]),
        body=np.array([0, 1, 2]),
        conductor_names=("drive ring", "Gehäuse"),
        body_names=("a", "b", "c"),
        densities=np.array([[1.0, 2.0, -1.0], [-0.25, -0.5, 3.0]]) * 1e-12,
        density=np.array([1.0, 2.0, 3.0]),
    )


def test_written_and_read_back(tmp_path, surface):
    folder = write_result(tmp_path / "probe.daraf", DOCUMENT, surface_bytes(surface, title="x"), "log\n")
    assert sorted(os.listdir(folder)) == ["log.txt", "result.json", "surface.vtp"]
    assert os.listdir(tmp_path) == ["probe.daraf"]
    back = read_result(folder)
    assert back.document == DOCUMENT
    assert back.log == "log\n"
    for name in ("corners", "n_corners", "conductor", "body", "densities", "density"):
        assert np.array_equal(getattr(back.surface, name), getattr(surface, name)), name
    assert back.surface.conductor_names == surface.conductor_names
    assert back.surface.body_names == surface.body_names


def test_names_that_look_like_markup_are_written_and_read_back(tmp_path, surface):
    named = replace(surface, conductor_names=("<b>\"&amp;'", "x&y>z"), body_names=("<a/>", "&", '"'))
    file = tmp_path / "surface.vtp"
    file.write_bytes(surface_bytes(named, title="<title>"))
    back = read_surface(file)
    assert (back.conductor_names, back.body_names) == (named.conductor_names, named.body_names)
    assert np.array_equal(back.densities, named.densities)


def test_pass_before_facets_and_metal_are_read_back(tmp_path, surface):
    offset, fill = np.array([0.0, 1e-3, 2e-3]), np.array([1, 0, -1])
    more = replace(surface, facet_offset=offset, body_fill=fill, previous=0.9 * surface.densities)
    folder = write_result(tmp_path / "p.daraf", DOCUMENT, surface_bytes(more), "")
    back = read_result(folder)
    assert np.array_equal(back.surface.facet_offset, offset)
    assert np.array_equal(back.surface.body_fill, fill)
    assert np.array_equal(back.surface.previous, 0.9 * surface.densities)
    assert foreign_files(folder) == []


def test_surface_file_carries_names_and_units(tmp_path, surface):
    from vtkmodules.vtkCommonCore import vtkDataArray
    from vtkmodules.vtkIOXML import vtkXMLPolyDataReader

    file = tmp_path / "surface.vtp"
    file.write_bytes(surface_bytes(surface, title="Probe"))
    reader = vtkXMLPolyDataReader()
    reader.SetFileName(str(file))
    reader.Update()
    data = reader.GetOutput()
    cells = data.GetCellData()
    names = [cells.GetArrayName(k) for k in range(cells.GetNumberOfArrays())]
    wanted = [
        "conductor",
        "body",
        "panel_size",
        "charge_density_drive ring",
        "charge_density_Gehäuse",
        "charge_density",
    ]
    assert names == wanted
    label = vtkDataArray.UNITS_LABEL()
    assert cells.GetArray("charge_density").GetInformation().Get(label) == "C/m2"
    assert cells.GetArray("panel_size").GetInformation().Get(label) == "m"
    assert cells.GetArray("panel_size").GetValue(0) == 1.0
    # The square and the triangle beside it share two corners: 3 + 2 + 2 + 3 points.
    assert data.GetNumberOfPoints() == 8
    assert data.GetFieldData().GetAbstractArray("title").GetValue(0) == "Probe"


def test_cut_surface_file_is_refused(tmp_path, surface):
    file = tmp_path / "surface.vtp"
    file.write_bytes(surface_bytes(surface)[:900])
    with pytest.raises(InputError, match="no complete surface file"):
        read_surface(file)
    with pytest.raises(InputError, match="cannot be read"):
        read_surface(tmp_path / "none.vtp")


def test_older_result_is_replaced_as_a_whole(tmp_path):
    folder = write_result(tmp_path / "a.daraf", DOCUMENT, b"", "first")
    write_result(folder, DOCUMENT, b"", "second")
    assert sorted(os.listdir(folder)) == ["log.txt", "result.json", "surface.vtp"]
    assert (folder / "log.txt").read_text() == "second"
    assert os.listdir(tmp_path) == ["a.daraf"]


def test_what_the_user_put_into_a_result_folder_is_kept(tmp_path):
    folder = write_result(tmp_path / "a.daraf", DOCUMENT, b"", "first")
    (folder / "notes.txt").write_text("measured: 3.4 pF")
    (folder / "photos").mkdir()
    (folder / "photos" / "one.txt").write_text("x")
    (folder / "link").symlink_to("notes.txt")
    write_result(folder, DOCUMENT, b"", "second")
    assert foreign_files(folder) == ["link", "notes.txt", "photos"]
    assert (folder / "notes.txt").read_text() == "measured: 3.4 pF"
    assert (folder / "photos" / "one.txt").read_text() == "x"
    assert (folder / "link").is_symlink()
    assert (folder / "log.txt").read_text() == "second"
    assert os.listdir(tmp_path) == ["a.daraf"]


def test_what_is_no_result_is_not_replaced(tmp_path):
    (tmp_path / "holiday").mkdir()
    (tmp_path / "holiday" / "photo.jpg").write_bytes(b"x")
    (tmp_path / "note.txt").write_text("x")
    (tmp_path / "other").mkdir()
    (tmp_path / "other" / "result.json").write_text('{"score": 1}')
    for name in ("holiday", "note.txt", "other"):
        with pytest.raises(InputError, match="no result of daraf, so it is not replaced"):
            write_result(tmp_path / name, DOCUMENT, b"", "")
    assert sorted(os.listdir(tmp_path)) == ["holiday", "note.txt", "other"]
    (tmp_path / "empty").mkdir()
    write_result(tmp_path / "empty", DOCUMENT, b"", "")


def test_places_that_cannot_be_written(tmp_path):
    with pytest.raises(InputError, match="does not exist; create it"):
        check_destination(tmp_path / "missing" / "a.daraf")
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="does not exist; create it"):
        check_destination(tmp_path / "file" / "a.daraf")
    with pytest.raises(InputError, match="is no name"):
        check_destination("/")
    # The kernel's own file system takes no folder, not even from root.
    with pytest.raises(InputError, match=r"cannot be written .* choose another place with --out"):
        check_destination("/proc/a.daraf")


@pytest.mark.parametrize("number", [1, 2, 3])
def test_disk_full_leaves_the_older_result_and_nothing_else(tmp_path, monkeypatch, number):
    folder = write_result(tmp_path / "a.daraf", DOCUMENT, b"", "first")
    calls = []

    def full(path, content):
        calls.append(path)
        if len(calls) == number:
            raise OSError(errno.ENOSPC, "No space left on device")
        path.write_bytes(content)

    monkeypatch.setattr(result_module, "_write", full)
    with pytest.raises(InputError, match="the disk is full, no result written"):
        write_result(folder, DOCUMENT, b"", "second")
    assert (folder / "log.txt").read_text() == "first"
    assert os.listdir(tmp_path) == ["a.daraf"]


def test_a_real_limit_on_file_size(tmp_path):
    # The kernel refuses to write past 4 kB: the same path as a full disk, without one.
    code = (
        "import resource, signal, sys\n"
        "from daraf.io.result import write_result\n"
        "from daraf.bem.errors import InputError\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (4096, 4096))\n"
        "try:\n"
        "    write_result(sys.argv[1], {'daraf': '0', 'capacitance': {}}, bytes(100_000), '')\n"
        "except InputError as error:\n"
        "    print(error)\n"
    )
    assert hasattr(resource, "RLIMIT_FSIZE")
    command = [sys.executable, "-c", code, str(tmp_path / "a.daraf")]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    assert "cannot be written (File too large), no result written" in done.stdout
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("failing", [1, 2])
def test_interrupted_while_renaming(tmp_path, monkeypatch, failing):
    folder = write_result(tmp_path / "a.daraf", DOCUMENT, b"", "first")
    calls, real = [], os.replace

    def replace(old, new):
        calls.append(old)
        if len(calls) == failing:
            raise KeyboardInterrupt
        real(old, new)

    monkeypatch.setattr(result_module.os, "replace", replace)
    with pytest.raises(KeyboardInterrupt):
        write_result(folder, DOCUMENT, b"", "second")
    monkeypatch.undo()
    assert (folder / "log.txt").read_text() == "first"
    assert os.listdir(tmp_path) == ["a.daraf"]


def test_readers_complaints(tmp_path):
    with pytest.raises(InputError, match=r"no result of daraf \(no result.json\)"):
        read_result(tmp_path)
    (tmp_path / "result.json").write_text("{")
    with pytest.raises(InputError, match="damaged, not valid JSON"):
        read_result(tmp_path)
    (tmp_path / "result.json").write_text("[]")
    with pytest.raises(InputError, match="no result of daraf"):
        read_result(tmp_path)


def test_document_text_is_readable_json_without_nan():
    text = document_text(DOCUMENT)
    assert json.loads(text) == DOCUMENT
    assert "[1.0, -0.5]" in text
    with pytest.raises(ValueError, match="JSON"):
        document_text({"x": float("nan")})
