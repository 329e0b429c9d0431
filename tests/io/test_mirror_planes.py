"""Mirror planes, half-spaces and earth electrodes of a case."""

import numpy as np
import pytest
import trimesh

from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.errors import InputError
from daraf.io.case import make_case
from daraf.io.outcome import solve_case
from daraf.io.problem import build_problem
from published import exact as X  # noqa: N812
from published import shapes as S  # noqa: N812

AXES = ("x", "y", "z")


def save(folder, name, mesh):
    mesh = mesh if isinstance(mesh, trimesh.Trimesh) else trimesh.Trimesh(*map(np.asarray, mesh), process=False)
    mesh.export(folder / f"{name}.stl")


def case_of(folder, *names, **more):
    conductors = [{"name": name, "surface": f"{name}.stl"} for name in names]
    return make_case({"unit": "m", "conductor": conductors, "accuracy": 0.02, **more}, folder=folder)


def solved(case):
    outcome = solve_case(case)
    assert outcome.solution.reached
    return outcome.solution.maxwell, outcome.solution.maxwell_uncertainty, outcome


def half_ball(folder):
    ball = trimesh.Trimesh(*S.uv_sphere(1.0, 32, 16), process=False)
    half = ball.slice_plane([0, 0, 0], [0, 0, -1], cap=True)
    assert half.is_watertight
    save(folder, "electrode", half)


def test_eighth_of_a_cube_drawn_as_a_closed_body(tmp_path):
    """Unit cube 0.66067815409957 over 4 pi eps0: published value, see the references of the shapes."""
    save(tmp_path, "cube", trimesh.creation.box(bounds=[[0, 0, 0], [0.5, 0.5, 0.5]]))
    planes = [{"kind": "magnetic", "normal": axis} for axis in AXES]
    value, spread, outcome = solved(case_of(tmp_path, "cube", plane=planes))
    assert abs(8.0 * value[0, 0] - 0.66067815409957 * FOUR_PI_EPSILON_0) <= 8.0 * spread[0, 0]
    # three of the six faces lie in the planes
    assert len(outcome.problem.surface.triangles) == 6
    told = [one["text"] for one in outcome.document["warnings"] if one["code"] == "modelled-part"]
    assert len(told) == 1
    assert "8 times" in told[0]


def test_the_fast_method_is_refused_not_ignored(tmp_path):
    save(tmp_path, "cube", trimesh.creation.box(bounds=[[0, 0, 0], [0.5, 0.5, 0.5]]))
    planes = [{"kind": "magnetic", "normal": axis} for axis in AXES]
    with pytest.raises(InputError, match="full matrix"):
        solve_case(case_of(tmp_path, "cube", plane=planes), method="fast")


def test_sphere_over_an_earthed_plane(tmp_path):
    """Maxwell's sums of images."""
    save(tmp_path, "ball", S.moved(S.icosphere(1.0, 2), z=1.5))
    value, spread, _ = solved(case_of(tmp_path, "ball", plane=[{"kind": "electric", "normal": "z"}]))
    assert abs(value[0, 0] - X.sphere_over_plane(1, 1.5) * FOUR_PI_EPSILON_0) <= spread[0, 0]


def test_coated_half_ball_at_a_symmetry_plane(tmp_path):
    """Both cut faces lie in the plane; the whole is the coated sphere."""
    half_ball(tmp_path)
    coat = trimesh.Trimesh(*S.uv_sphere(1.5, 32, 16), process=False).slice_plane([0, 0, 0], [0, 0, -1], cap=True)
    save(tmp_path, "coat", coat)
    coats = [{"name": "coat", "surface": "coat.stl", "relative_permittivity": 4}]
    plane = [{"kind": "magnetic", "normal": "z"}]
    value, spread, _ = solved(case_of(tmp_path, "electrode", dielectric=coats, plane=plane))
    exact = FOUR_PI_EPSILON_0 / ((1.0 - 1.0 / 1.5) / 4.0 + 1.0 / 1.5)
    assert abs(2.0 * value[0, 0] - exact) <= 2.0 * spread[0, 0]


def test_ball_half_in_a_half_space_is_cut_at_its_plane(tmp_path):
    """The field is radial, tangential to the interface: a (e1 + e2) / 2."""
    save(tmp_path, "ball", S.icosphere(1.0, 3))
    value, spread, outcome = solved(case_of(tmp_path, "ball", half_space={"relative_permittivity": 4}))
    assert outcome.problem.surface.n_bodies == 2
    assert abs(value[0, 0] - 2.5 * FOUR_PI_EPSILON_0) <= spread[0, 0]


def test_hemisphere_in_soil(tmp_path):
    """R = 1 / (2 pi kappa a), elementary: radial current."""
    half_ball(tmp_path)
    case = case_of(
        tmp_path,
        "electrode",
        conduction=True,
        medium={"conductivity": "10 mS/m"},
        plane=[{"kind": "magnetic", "normal": "z"}],
    )
    _, _, outcome = solved(case)
    resistance = outcome.document["conduction"]["resistance"]
    exact = 1.0 / (2.0 * np.pi * 0.01)
    assert abs(resistance["value"][0][0] - exact) <= resistance["uncertainty"][0][0]
    assert "resistance to infinity" in outcome.text()
    assert "earthing standard" in " ".join(outcome.text().split())
    assert "capacitance to infinity" not in outcome.text()


def test_conducting_coat_in_series(tmp_path):
    """R = (1/a - 1/b) / (4 pi k1) + 1 / (4 pi k2 b), elementary."""
    save(tmp_path, "core", S.icosphere(1.0, 2))
    save(tmp_path, "coat", S.icosphere(1.5, 2))
    coats = [{"name": "coat", "surface": "coat.stl", "relative_permittivity": 1, "conductivity": 0.05}]
    case = case_of(tmp_path, "core", dielectric=coats, conduction=True, medium={"conductivity": 0.2})
    resistance = solved(case)[2].document["conduction"]["resistance"]
    exact = ((1.0 - 1.0 / 1.5) / 0.05 + 1.0 / 1.5 / 0.2) / (4.0 * np.pi)
    assert abs(resistance["value"][0][0] - exact) <= resistance["uncertainty"][0][0]


WRONG = [
    ({"plane": [{"kind": "magnetic", "normal": "z"}, {"kind": "electric", "normal": [0, 1, 1]}]}, "orthogonal"),
    ({"plane": [{"kind": "magnetic", "normal": "z"}]}, "reaches through a mirror plane"),
    ({"plane": [{"kind": "mirror", "normal": "z"}]}, "'electric' or 'magnetic'"),
    ({"plane": [{"kind": "electric"}]}, "'normal' is missing"),
    ({"half_space": {"relative_permittivity": 0.5}}, "greater than or equal to 1"),
    ({"half_space": {"relative_permittivity": 2}, "frequencies": [50]}, "no medium has losses|images hold"),
    ({"conduction": True}, "medium has no conductivity"),
    ({"conduction": True, "medium": {"conductivity": 1}, "frequencies": [50]}, "takes no frequencies"),
]


@pytest.mark.parametrize(("more", "words"), WRONG)
def test_what_is_refused(tmp_path, more, words):
    save(tmp_path, "ball", S.icosphere(1.0, 1))
    with pytest.raises(InputError, match=words):
        solve_case(case_of(tmp_path, "ball", **more))


def test_half_spaces_with_dielectrics_are_refused(tmp_path):
    save(tmp_path, "ball", S.icosphere(1.0, 1))
    coats = [{"name": "coat", "surface": "ball.stl", "relative_permittivity": 2}]
    with pytest.raises(InputError, match="half_space: images hold for conductors"):
        build_problem(case_of(tmp_path, "ball", dielectric=coats, half_space={"relative_permittivity": 4}))
