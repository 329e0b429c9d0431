"""The main job against published values: each within its own uncertainty, and that within the accuracy asked."""

import struct

import numpy as np
import pytest

from daraf.bem import eliminate_floating, excite, solve_capacitance
from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.io import load_case, read_bodies, read_result, solve_case
from daraf.io.outcome import solve_problem
from daraf.io.problem import problem_from_files
from published import exact, shapes
from published.cases import case_named
from published.covering import judge

ACCURACY = 0.01

# Sources stand beside the cases.
BODIES = [
    "sphere-320",
    "sphere-poles",
    "prolate-2",
    "oblate-2",
    "cube",
    "tetrahedron",
    "plate",
    "plate-2",
    "disc-48",
    "bowl-90",
    "bowl-120",
    "hemisphere",
    "cylinder-48",
    "tube-2",
    "torus-2",
    "capsule-2",
    "ellipsoid-coarse",
]
PAIRS = ["balls-gap-1", "squares-0.1", "squares-2", "discs-1", "balls-unequal"]
ENCLOSURES = ["shell-inward", "eccentric", "ball-in-box"]
NETWORKS = ["row", "row-floating", "row-joined", "squares-with-third"]
# Over 1,200 panels: some seconds each.
SLOW = {"prolate-2", "oblate-2", "balls-unequal", "shell-inward", "eccentric", "ball-in-box", "row-floating"}
NAMES = [*BODIES, *PAIRS, *ENCLOSURES, *NETWORKS]


@pytest.mark.parametrize("name", [pytest.param(n, marks=[pytest.mark.slow] if n in SLOW else []) for n in NAMES])
def test_published_value_lies_within_the_stated_uncertainty(name):
    verdict = judge(case_named(name), ACCURACY)
    assert verdict.reached
    assert (np.abs(verdict.error) <= verdict.uncertainty).all(), dict(zip(verdict.entry, verdict.error, strict=True))
    if verdict.lines:
        # Entry by entry as asked; what is derived from the entries adds their uncertainties up.
        assert (verdict.uncertainty <= verdict.target).all()
    assert (np.abs(verdict.error) <= verdict.target).all()


def test_coupling_to_the_inside_of_a_shell():
    # a b/(b - a): Maxwell, Treatise (1873) art. 125
    surface = shapes.surface([shapes.icosphere(1.0, 2), shapes.icosphere(2.0, 2)])
    solution = solve_capacitance(surface, accuracy=ACCURACY)
    exact_value = FOUR_PI_EPSILON_0 * exact.concentric_spheres(1, 2)
    assert abs(solution.maxwell[0, 1] + exact_value) <= solution.maxwell_uncertainty[0, 1] <= ACCURACY * exact_value
    assert abs(solution.maxwell[0, 0] - exact_value) <= solution.maxwell_uncertainty[0, 0]
    # Nothing of the inner sphere reaches infinity.
    assert abs(solution.to_infinity[0]) <= solution.to_infinity_uncertainty[0]


def test_two_terminal_network_with_a_floating_conductor():
    """The same from three doors: the reduced matrix, an excitation, and the Schur complement of the exact one."""
    case = case_named("row")
    solution = solve_capacitance(case.surface(), accuracy=ACCURACY)
    reduced, spread = eliminate_floating(solution.maxwell, solution.maxwell_uncertainty, [False, True, False])
    reference = case_named("row-floating").reference()
    assert (np.abs(reduced - reference) <= spread).all()
    state = excite(
        solution.maxwell, solution.maxwell_uncertainty, held=[True, False, True], values=np.array([1.0, 0.0, 0.0])
    )
    assert np.abs(state.charge[[0, 2]] - reference[0]) == pytest.approx([0, 0], abs=state.charge_uncertainty.max())
    # The exact potential of the floating sphere: -C_21/C_22.
    full = case.reference()
    assert abs(state.potential[1] + full[1, 0] / full[1, 1]) <= state.potential_uncertainty[1]


def _binary_stl(path, *meshes):
    """Write meshes given in metres as a binary STL in millimetres."""
    corners = np.concatenate([1e3 * vertices[triangles] for vertices, triangles in meshes])
    normals = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    record = np.zeros(len(corners), dtype=[("numbers", "<f4", (12,)), ("spare", "<u2")])
    record["numbers"] = np.concatenate([normals, corners.reshape(-1, 9)], axis=1)
    path.write_bytes(bytes(80) + struct.pack("<I", len(corners)) + record.tobytes())


def test_two_spheres_through_a_surface_file(tmp_path):
    # Maxwell, Treatise (1873) art. 173
    ball = shapes.icosphere(0.03, 2)
    _binary_stl(tmp_path / "balls.stl", ball, shapes.moved(ball, x=0.09))
    outcome = solve_problem(problem_from_files([tmp_path / "balls.stl"], "mm"), accuracy=ACCURACY)
    reference = FOUR_PI_EPSILON_0 * exact.two_spheres(0.03, 0.03, 0.09)
    solution = outcome.solution
    assert solution.conductor_names == ("balls-1", "balls-2")
    assert (np.abs(solution.maxwell - reference) <= solution.maxwell_uncertainty).all()
    assert (solution.maxwell_uncertainty <= ACCURACY * np.abs(reference)).all()


def test_files_and_arrays_give_the_same(tmp_path):
    mesh = shapes.cylinder(0.01, 0.02, 24)
    _binary_stl(tmp_path / "pin.stl", mesh)
    outcome = solve_problem(problem_from_files([tmp_path / "pin.stl"], "mm"), accuracy=ACCURACY)
    body = read_bodies([tmp_path / "pin.stl"], "mm")[0]
    assert shapes.volume((body.vertices, body.triangles)) == pytest.approx(shapes.volume(mesh), rel=1e-6)
    direct = solve_capacitance(shapes.surface([mesh]), accuracy=ACCURACY)
    # Single precision of the file: 6e-8 of the size; the order of the vertices may change the panels.
    limit = np.hypot(outcome.solution.maxwell_uncertainty, direct.maxwell_uncertainty)
    assert (np.abs(outcome.solution.maxwell - direct.maxwell) <= limit).all()
    reference = FOUR_PI_EPSILON_0 * exact.solid_cylinder(0.01, 0.02)
    assert abs(outcome.solution.maxwell[0, 0] - reference) <= outcome.solution.maxwell_uncertainty[0, 0]


CASE_TEXT = """\
title = "Three balls in a row"
unit = "mm"
accuracy = "1 %"

[[conductor]]
name = "drive"
surface = "balls.stl"
body = 1
potential = "1 kV"

[[conductor]]
name = "float"
surface = "balls.stl"
body = 2
charge = "0 nC"

[[conductor]]
name = "sense"
surface = "balls.stl"
body = 3
ground = true
"""


def test_floating_ball_through_a_case_file(tmp_path):
    # Hobson (1931) art. 89 and a Schur complement
    radii, positions = (0.010, 0.005, 0.008), (0.0, 0.020, 0.040)
    balls = [shapes.moved(shapes.icosphere(r, 2), x=x) for r, x in zip(radii, positions, strict=True)]
    _binary_stl(tmp_path / "balls.stl", *balls)
    (tmp_path / "balls.toml").write_text(CASE_TEXT, encoding="utf-8")
    outcome = solve_case(load_case(tmp_path / "balls.toml"))
    document = read_result(outcome.write(tmp_path / "balls.daraf")).document
    # The rows of "row" and "row-floating" are this arrangement in metres.
    matrix = 0.01 * case_named("row").reference()
    reduced = 0.01 * case_named("row-floating").reference()
    assert document["conductors"] == ["drive", "float", "sense"]
    charge, potential = document["charge"], document["potential"]
    for k, expected in ((0, 1e3 * reduced[0, 0]), (2, 1e3 * reduced[0, 1])):
        assert abs(charge["value"][k] - expected) <= charge["uncertainty"][k]
    assert charge["value"][1] == 0.0
    expected = -1e3 * matrix[1, 0] / matrix[1, 1]
    assert abs(potential["value"][1] - expected) <= potential["uncertainty"][1]
