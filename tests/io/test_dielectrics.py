"""Dielectric bodies of a case: cut where media meet, each shared area once, losses, and what is refused."""

import json

import numpy as np
import pytest
import trimesh

from daraf.bem.constants import EPSILON_0, FOUR_PI_EPSILON_0
from daraf.bem.errors import InputError
from daraf.io.bodies import Body
from daraf.io.case import load_case, make_case
from daraf.io.cli.main import main
from daraf.io.media_pieces import Drawn, cut_where_media_meet
from daraf.io.outcome import solve_case
from daraf.io.problem import build_problem
from daraf.io.tables import result_text
from published import shapes as S  # noqa: N812


def box(low, high, name):
    mesh = trimesh.creation.box(bounds=[low, high])
    return Body(name, np.array(mesh.vertices), np.array(mesh.faces, dtype=np.int64))


def drawn(body, medium):
    return Drawn(body, (), medium, True, f"body {body.name!r}")


def vector_areas(pieces):
    """Area vectors (out of the drawn body) and areas by (drawn, front, back)."""
    found = {}
    for piece in pieces:
        corners = piece.vertices[piece.triangles]
        normal = 0.5 * np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
        found[piece.drawn, piece.front, piece.back] = (normal.sum(axis=0), np.linalg.norm(normal, axis=1).sum())
    return found


BLOCK = ((0, 0, 0), (1, 1, 1))
SUNK, ON_TOP, WITHIN = ((0.3, 0.3, 0.5), (0.7, 0.7, 1)), ((0.3, 0.3, 1), (0.7, 0.7, 1.5)), ((0.2,) * 3, (0.8,) * 3)
CUTS = {
    "flush": ([(SUNK, 0), (BLOCK, 1)], {(0, 1, -1): 0.96, (0, 0, -1): 0.16, (1, 0, 1): 5.84}),
    "on top": ([(ON_TOP, 0), (BLOCK, 1)], {(0, 1, -1): 0.16, (0, 0, -1): 0.96, (1, 0, 1): 5.84}),
    "nested": ([(WITHIN, 1), (BLOCK, 2)], {(0, 2, 1): 2.16, (1, 0, 2): 6.0}),
    "stacked": (
        [(SUNK, 0), (BLOCK, 1), (((0, 0, 1), (1, 1, 2)), 2)],
        {(0, 1, -1): 0.96, (0, 2, -1): 0.16, (1, 2, 1): 0.84, (1, 0, 1): 5.0, (2, 0, 2): 5.0},
    ),
    "overlapping": (
        [(SUNK, 0), (BLOCK, 1), (((0, 0, 0), (1, 1, 2)), 2)],
        {(0, 1, -1): 0.96, (0, 2, -1): 0.16, (1, 2, 1): 0.84, (1, 0, 1): 5.0, (2, 0, 2): 5.0},
    ),
}


@pytest.mark.parametrize("turned", [False, True])
@pytest.mark.parametrize("name", CUTS)
def test_each_shared_area_is_there_once(name, turned):
    bodies, areas = CUTS[name]
    made = [box(*ends, f"body-{k}") for k, (ends, _) in enumerate(bodies)]
    if turned:
        # nothing axis-parallel, coordinates that round
        turn = trimesh.transformations.rotation_matrix(0.7, [1, 2, 3])[:3, :3]
        made = [Body(one.name, one.vertices @ turn.T + 5.0, one.triangles) for one in made]
    pieces, _ = cut_where_media_meet([drawn(one, medium) for one, (_, medium) in zip(made, bodies, strict=True)])
    found = vector_areas(pieces)
    # faces that touch are moved by a hair, 1e-9 of the scene of size 2 to 3
    assert {key: area for key, (_, area) in found.items()} == pytest.approx(areas, abs=1e-7)
    for medium in range(3):
        out = sum((v for (_, front, back), (v, _) in found.items() if back == medium), np.zeros(3))
        into = sum((v for (_, front, back), (v, _) in found.items() if front == medium), np.zeros(3))
        assert np.abs(out - into).max() < 1e-12  # rounding: the boundary of each medium is closed


def save(folder, **bodies):
    for name, mesh in bodies.items():
        vertices, triangles = (mesh.vertices, mesh.triangles) if isinstance(mesh, Body) else mesh
        trimesh.Trimesh(np.asarray(vertices), np.asarray(triangles), process=False).export(folder / f"{name}.stl")


def stated(conductors, dielectrics, **more):
    return {
        "unit": "m",
        "conductor": [{"name": name, "surface": f"{name}.stl"} for name in conductors],
        "dielectric": [{"name": name, "surface": f"{name}.stl", **media} for name, media in dielectrics.items()],
        **more,
    }


def test_coated_sphere_through_the_command_line(tmp_path, capsys):
    """Radial field: C = 4 pi eps0 / ((1/a - 1/b) / e + 1/b)."""
    save(tmp_path, core=S.icosphere(1.0, 2), coat=S.icosphere(1.5, 2))
    text = 'unit = "m"\naccuracy = "2 %"\n[[conductor]]\nname = "core"\nsurface = "core.stl"\npotential = 1\n'
    text += '[[dielectric]]\nname = "coat"\nsurface = "coat.stl"\nrelative_permittivity = 4\n'
    (tmp_path / "coated.toml").write_text(text)
    assert main(["solve", str(tmp_path / "coated.toml"), "--json", "-q"]) == 0
    document = json.loads(capsys.readouterr().out)
    exact = FOUR_PI_EPSILON_0 / ((1.0 - 1.0 / 1.5) / 4.0 + 1.0 / 1.5)
    value, spread = (document["capacitance"][key][0][0] for key in ("maxwell", "maxwell_uncertainty"))
    assert abs(value - exact) <= spread
    assert spread < 0.02 * exact
    assert document["charge"]["value"][0] == pytest.approx(value)
    assert [one["name"] for one in document["media"]] == ["surrounding medium", "coat"]
    assert "reciprocity" in [line["cause"] for line in document["budget"]]
    assert "dielectric-yields" in [one["code"] for one in document["warnings"]]
    assert "relative permittivity 1, coat 4" in result_text(document)


def plates_and_slab(folder):
    """Two plates that touch a slab, flush with it on one side."""
    save(
        folder,
        low=box((0, 0, 0), (1, 1, 0.1), "low"),
        high=box((0, 0, 0.3), (1, 1, 0.4), "high"),
        slab=box((0, -0.2, 0.1), (1.0, 1.2, 0.3), "slab"),
    )


def test_a_dielectric_of_permittivity_one_changes_nothing(tmp_path):
    plates_and_slab(tmp_path)
    bare = solve_case(make_case(stated(["low", "high"], {}, accuracy=0.02), folder=tmp_path)).solution
    case = make_case(stated(["low", "high"], {"slab": {"relative_permittivity": 1}}, accuracy=0.02), folder=tmp_path)
    filled = solve_case(case).solution
    spread = bare.maxwell_uncertainty + filled.maxwell_uncertainty
    assert np.all(np.abs(filled.maxwell - bare.maxwell) <= spread)
    assert filled.reached
    # nothing overlaps, so that nothing yields
    assert build_problem(case).notices == ()


def test_losses_of_one_medium_throughout(tmp_path):
    """With one loss tangent everywhere G = omega C tan(delta), exactly."""
    save(tmp_path, core=S.icosphere(1.0, 1))
    medium = {"relative_permittivity": 3.0, "loss_tangent": "2 %", "conductivity": "1 uS/m"}
    content = stated(["core"], {}, medium=medium, frequencies=["50 Hz", "1 kHz"], accuracy=0.05)
    outcome = solve_case(make_case(content, folder=tmp_path))
    rows = outcome.document["admittance"]["at"]
    for row in rows:
        omega = 2.0 * np.pi * row["frequency"]
        tangent = 0.02 + 1e-6 / (omega * EPSILON_0 * 3.0)
        value = row["conductance"][0][0] / (omega * row["capacitance"][0][0])
        assert value == pytest.approx(tangent, rel=1e-9)  # rounding: one factor on the whole system
    assert [row["frequency"] for row in rows] == [50.0, 1000.0]
    assert "conductance to infinity" in outcome.text()


REFUSED = [
    ({"relative_permittivity": 0.5}, "greater than or equal to 1"),
    ({"relative_permittivity": float("nan")}, "dielectric 1 'slab', relative_permittivity"),
    ({}, "'relative_permittivity' is missing"),
    ({"relative_permittivity": 2, "loss_tangent": -1}, "below 0"),
    ({"relative_permittivity": 2, "loss_tangent": 0.1}, "dielectric 'slab' has losses: add frequencies"),
    ({"relative_permittivity": 2, "permittivity": 3}, "unknown key 'permittivity'"),
]


@pytest.mark.parametrize(("media", "words"), REFUSED)
def test_media_that_cannot_be(tmp_path, media, words):
    with pytest.raises(InputError, match=words):
        make_case(stated(["low"], {"slab": media}), folder=tmp_path)


def test_frequencies_without_losses_are_refused(tmp_path):
    with pytest.raises(InputError, match="no medium has losses"):
        make_case(stated(["low"], {}, frequencies=[50]), folder=tmp_path)
    with pytest.raises(InputError, match="no frequency of a loss"):
        make_case(stated(["low"], {}, frequencies=[0]), folder=tmp_path)


def test_names_are_taken_once(tmp_path):
    with pytest.raises(InputError, match="two bodies are named 'low'"):
        make_case(stated(["low"], {"low": {"relative_permittivity": 2}}), folder=tmp_path)


def test_open_dielectrics_are_refused_with_the_place(tmp_path):
    vertices, triangles = S.cube(1.0)
    save(tmp_path, core=S.icosphere(0.2, 1), open=(vertices, np.asarray(triangles)[2:]))
    case = make_case(stated(["core"], {"open": {"relative_permittivity": 2}}, mend="safe"), folder=tmp_path)
    with pytest.raises(InputError, match=r"dielectric 'open': .*open.*close it in CAD"):
        build_problem(case)


def test_sheets_across_the_face_of_a_dielectric_are_refused(tmp_path):
    sheet = (np.array([[0.5, -1, -1], [0.5, 2, -1], [0.5, 2, 2.0]]), np.array([[0, 1, 2]]))
    save(tmp_path, sheet=sheet, block=box(*BLOCK, "block"))
    case = make_case(stated(["sheet"], {"block": {"relative_permittivity": 2}}), folder=tmp_path)
    with pytest.raises(InputError, match=r"conductor 'sheet': the sheet meets the surface of .*dielectric 'block'"):
        build_problem(case)


def test_sheets_within_a_dielectric_lie_in_it(tmp_path):
    sheet = (np.array([[0.5, 0.2, 0.2], [0.5, 0.8, 0.2], [0.5, 0.8, 0.8]]), np.array([[0, 1, 2]]))
    save(tmp_path, sheet=sheet, block=box(*BLOCK, "block"))
    (tmp_path / "case.toml").write_text(
        'unit = "m"\n[[conductor]]\nname = "sheet"\nsurface = "sheet.stl"\n'
        '[[dielectric]]\nname = "block"\nsurface = "block.stl"\nrelative_permittivity = 2\n'
    )
    problem = build_problem(load_case(tmp_path / "case.toml"))
    assert problem.media is not None
    assert problem.surface.conductor_names == ("sheet", "block")
    assert problem.media.outside.tolist() == [1, 0]
    assert problem.media.inside.tolist() == [1, 1]
