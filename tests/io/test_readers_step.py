"""STEP: units, names, placement, the tolerance of facets, and what happens without the kernel."""

import importlib.util
import json
import subprocess

import manifold3d
import numpy as np
import pytest
import step_parts
import trimesh

from daraf.bem.errors import InputError
from daraf.io.bodies import read_bodies
from daraf.io.cli import main
from daraf.io.facet_tolerance import FacetTolerance, parse_facet_tolerance
from daraf.io.gaps import Shape
from daraf.io.inspection import inspect_files
from daraf.io.readers import may_be_curved, step
from daraf.io.readers.step_text import point_span, step_unit

needs_kernel = pytest.mark.skipif(importlib.util.find_spec("cascadio") is None, reason="the extra [step] is not there")

BALL = 4.0 / 3.0 * np.pi * 8e-3**3
#: Box less bore less what the fillet takes from its edge.
BRACKET = (40 * 20 * 10 - np.pi * 25 * 10 - (9 - np.pi * 9 / 4) * 20) * 1e-9


def write(path, text):
    path.write_text(text)
    return path


@needs_kernel
@pytest.mark.parametrize(("unit", "name"), [("mm", "mm"), ("in", "in"), ("m", "m"), ("km", "mm")])
def test_bracket_in_each_unit(tmp_path, unit, name):
    path = write(tmp_path / "part.step", step_parts.bracket_step(unit))
    (body,) = read_bodies(path, None)
    assert (body.name, body.unit) == ("bracket", name)
    assert body.box == pytest.approx(np.array([[0.0, 0.0, 0.0], [0.04, 0.02, 0.01]]), abs=1e-8)  # single precision
    # a bore of n facets is too small by 7 / n^2 of its volume; n is 18 at least
    assert Shape(body).volume == pytest.approx(BRACKET, rel=0.01)
    codes = [fault.code for fault in body.faults]
    assert codes == ["facet-tolerance", *(["odd-unit"] if unit == "km" else [])]


@needs_kernel
def test_assembly_in_inches_keeps_names_and_placement(tmp_path):
    path = write(tmp_path / "rig.stp", step_parts.rig_step("in"))
    drive, sense = read_bodies(path, "in")
    assert (drive.name, sense.name) == ("drive", "sense")
    assert drive.box == pytest.approx(np.array([[0.0, 0.0, 0.0], [0.04, 0.02, 0.01]]), abs=1e-7)
    assert sense.box.mean(axis=0) == pytest.approx([0.02, 0.01, 0.025], abs=1e-4)
    with pytest.raises(InputError, match=r"rig\.stp: the file says in, the unit stated is mm"):
        read_bodies(path, "mm")
    report = inspect_files(path)
    assert [body.closed for body in report.bodies] == [True, True]
    assert not any(fault.severity != "note" for body in report.bodies for fault in body.faults)
    assert report.bodies[0].gaps[0].distance == pytest.approx(7e-3, abs=1e-4)


@needs_kernel
@pytest.mark.parametrize(("stated", "within"), [("0.4 mm", 4e-4), ("0.02 mm", 2e-5), ("0.05 %", 5e-4 * 16e-3 * 3**0.5)])
def test_facets_of_a_sphere_stay_within_the_tolerance(tmp_path, stated, within):
    path = write(tmp_path / "ball.step", step_parts.ball_step())
    (body,) = read_bodies(path, None, facet_tolerance=parse_facet_tolerance(stated))
    corners = body.vertices[body.triangles]
    assert np.linalg.norm(body.vertices, axis=1) == pytest.approx(8e-3, rel=1e-6)
    middles = corners.mean(axis=1)
    assert 8e-3 - np.linalg.norm(middles, axis=1).min() <= within
    # closed, and no triangle shrunk to nothing at the poles
    assert Shape(body).volume == pytest.approx(BALL, rel=3 * within / 8e-3)
    assert (np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1) > 0.0).all()


@needs_kernel
@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "the file is empty"),
        ("solid\n", "does not start with 'ISO-10303-21'"),
        (step_parts.ball_step()[:-30], "truncated"),
        (step_parts.ball_step().replace("SPHERICAL_SURFACE", "SPHERICAL"), "no surface mesh"),
        (step_parts.ball_step().replace("#5 = ", "#5 ) "), "damaged or no valid STEP"),
        (step_parts.bracket_step().replace("CIRCLE", "CIRKLE", 1), "of 8 faces could be made into facets"),
        (step_parts.rig_step().replace("SPHERICAL_SURFACE", "SPHERICAL", 1), "8 of 9 faces could be made into facets"),
        (step_parts.ball_step("in").replace("25.4", "0."), "its unit of length .* cannot be understood"),
    ],
)
def test_bad_step_files(tmp_path, text, words):
    path = write(tmp_path / "bad.step", text)
    with pytest.raises(InputError, match=rf"^{path}: .*({words})") as caught:
        read_bodies(path, None)
    assert str(caught.value).isprintable()


def test_without_the_kernel_the_command_that_installs_it_is_told(tmp_path, monkeypatch):
    path = write(tmp_path / "ball.step", step_parts.ball_step())
    monkeypatch.setattr(step, "_KERNEL", "no_such_kernel")
    with pytest.raises(
        InputError, match=r"ball\.step: reading STEP needs one more package: pip install 'daraf\[step\]'"
    ):
        read_bodies(path, None)


@pytest.mark.parametrize(
    ("outcome", "words"),
    [
        (subprocess.TimeoutExpired("kernel", 1.0), "does not finish it"),
        (-11, "crashed"),
        (3, "holds no solid or surface"),
    ],
)
def test_a_kernel_that_fails_is_told(tmp_path, monkeypatch, outcome, words):
    def run(*_args, **_options):
        if isinstance(outcome, Exception):
            raise outcome
        return subprocess.CompletedProcess([], outcome, b"")

    monkeypatch.setattr(step, "_KERNEL", "numpy")
    monkeypatch.setattr(subprocess, "run", run)
    with pytest.raises(InputError, match=words):
        read_bodies(write(tmp_path / "ball.step", step_parts.ball_step()), None)


def test_units_are_read_from_the_text(tmp_path):
    text = step_parts.ball_step("in").replace("#1 = ", "/* SI_UNIT(.KILO.,.METRE.) */ #1 = ")
    unit = step_unit(tmp_path, text.encode())
    assert (unit.name, unit.metres, unit.said) == ("in", 0.0254, None)
    # from the pole to the middle, and the radius on all sides
    assert point_span(text.encode(), unit.own) == pytest.approx(np.linalg.norm([16e-3, 16e-3, 24e-3]))
    bare = text.replace("GLOBAL_UNIT_ASSIGNED_CONTEXT", "OTHER_CONTEXT")
    assert step_unit(tmp_path, bare.encode()).name is None
    circle = text.replace(",#1)", ",#4)").encode()
    with pytest.raises(InputError, match="cannot be understood"):
        step_unit(tmp_path, circle)


def test_words_for_the_facet_tolerance():
    assert parse_facet_tolerance("0.02 mm") == FacetTolerance(length=pytest.approx(2e-5))
    assert parse_facet_tolerance("0.1 %").metres(2.0) == pytest.approx(2e-3)
    for bad in ("0 mm", "-1 mm", "20 %", "fine", None):
        with pytest.raises(InputError):
            parse_facet_tolerance(bad)
    assert may_be_curved("a.STEP")
    assert may_be_curved("a.stp.gz")
    assert not may_be_curved("a.step.stl")


def test_a_facet_tolerance_without_curved_shapes_is_refused(tmp_path, capsys):
    path = write(tmp_path / "two.stl", "solid")
    assert main(["inspect", str(path), "--unit", "mm", "--facet-tolerance", "1 um"]) == 2
    assert "a facet tolerance says nothing" in capsys.readouterr().err


def rig_stl(path):
    """The same rig as facets by another library, in mm."""
    arc = np.linspace(0.0, np.pi / 2, 7)
    outline = [[0, 0], [40, 0], *np.column_stack([37 + 3 * np.cos(arc), 7 + 3 * np.sin(arc)]).tolist(), [0, 10]]
    block = manifold3d.Manifold.extrude(manifold3d.CrossSection([outline]), 20.0)
    block = block.rotate([90.0, 0.0, 0.0]).translate([0.0, 20.0, 0.0])
    bore = manifold3d.Manifold.cylinder(12.0, 5.0, 5.0, 32).translate([15.0, 10.0, -1.0])
    held = (block - bore).to_mesh()
    drive = trimesh.Trimesh(held.vert_properties[:, :3], held.tri_verts)
    sense = trimesh.creation.icosphere(3, radius=8.0)
    sense.apply_translation([20.0, 10.0, 25.0])
    texts = [trimesh.exchange.stl.export_stl_ascii(mesh) for mesh in (drive, sense)]
    solids = zip(texts, ("drive", "sense"), strict=True)
    return write(path, "\n".join(text.replace("solid ", f"solid {name}", 1) for text, name in solids))


@needs_kernel
@pytest.mark.slow
def test_the_same_rig_as_step_and_as_stl_has_the_same_capacitances(tmp_path, capsys):
    found = []
    for path, more in (
        (write(tmp_path / "rig.step", step_parts.rig_step("in")), ["--facet-tolerance", "0.1 mm"]),
        (rig_stl(tmp_path / "rig2.stl"), ["--unit", "mm"]),
    ):
        assert main(["solve", str(path), *more, "--accuracy", "1 %", "--json", "-q"]) == 0
        found.append(json.loads(capsys.readouterr().out))
    assert found[0]["conductors"] == found[1]["conductors"] == ["drive", "sense"]
    assert [one["code"] for one in found[0]["warnings"]] == ["facet-tolerance"]
    (c, dc), (d, dd) = (
        (np.array(one["capacitance"][key]) for key in ("maxwell", "maxwell_uncertainty")) for one in found
    )
    assert (np.abs(c - d) <= dc + dd).all()
    assert (dc <= 0.01 * np.abs(c)).all()
    # the facets of both are in the budget
    assert all("facets" in {line["cause"] for line in one["budget"]} for one in found)
