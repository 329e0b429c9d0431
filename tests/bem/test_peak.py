"""Where the surface field has a peak, how large it is, and where there is none."""

import numpy as np
import pytest

from daraf.bem import excite, solve_capacitance
from daraf.bem.charges import stated_charges
from daraf.bem.creases import find_creases
from daraf.bem.peak import peak_fields, wedge_exponent
from daraf.bem.regions import find_regions
from daraf.bem.sides import two_sided_bodies
from published import shapes


def peaks(meshes, potentials, **options):
    surface = shapes.surface(meshes)
    solution = solve_capacitance(surface, accuracy=0.03, **options)
    held = np.ones(len(potentials), bool)
    state = excite(solution.maxwell, solution.maxwell_uncertainty, held, np.array(potentials, dtype=float))
    return peak_fields(stated_charges(surface, solution, state, **options))


def test_exponents_of_edges():
    # Jackson, Classical Electrodynamics, section 2.11; Meixner 1972
    assert wedge_exponent(0.0) == pytest.approx(1 / 2)
    assert wedge_exponent(0.5 * np.pi) == pytest.approx(1 / 3)
    assert wedge_exponent(np.pi) == pytest.approx(0.0, abs=1e-15)
    assert wedge_exponent(np.arccos(1 / 3)) == pytest.approx(0.378177, abs=1e-6)


SHARP = {
    "cube": (shapes.cube(), 1 / 3),
    "plate": (shapes.plate(), 1 / 2),
    "disc": (shapes.disc(1.0, 24), 1 / 2),
    "cylinder": (shapes.cylinder(1.0, 2.0), 1 / 3),
    "tetrahedron": (shapes.regular_solid("tetrahedron"), 0.378177),
    "octahedron": (shapes.regular_solid("octahedron"), 0.281520),
}


@pytest.mark.parametrize("name", SHARP)
def test_sharp_edges_have_no_peak(name):
    mesh, exponent = SHARP[name]
    (found,) = peaks([mesh], [1.0])
    assert not found.bounded
    assert found.uncertainty is None
    assert found.exponent == pytest.approx(exponent, abs=1e-5)
    # the highest panel lies at an edge; at this accuracy panels are up to 0.4 long
    assert np.linalg.norm(found.at - found.edge_at) < 0.2
    assert found.peak > 0


def test_tip_of_a_cone_has_no_peak():
    profile = [(0.0, 0.0), (0.5, 0.1), (0.8, 0.3), (0.9, 0.6), (0.8, 0.9), (0.0, 3.0)]
    (found,) = peaks([shapes.lathe(profile, 24)], [1.0])
    assert not found.bounded
    assert found.exponent is None
    np.testing.assert_allclose(found.edge_at, [0.0, 0.0, 3.0], atol=1e-12)


def test_facets_that_are_the_part_are_sharp():
    mesh = shapes.icosphere(1.0, 1)
    assert peaks([mesh], [1.0])[0].bounded
    assert not peaks([mesh], [1.0], facets="as drawn")[0].bounded


def test_smooth_bodies_are_bounded():
    for mesh in (shapes.torus(2.0, 0.5), shapes.capsule(1.0, 2.0), shapes.spheroid(2.0, 1.0, 2)):
        (found,) = peaks([mesh], [1.0])
        assert found.bounded
        assert 0 < found.uncertainty < 0.2 * found.peak
        assert found.exponent is None
        assert found.edge_at is None


def test_no_field_no_peak():
    (found,) = peaks([shapes.icosphere(1.0, 1)], [0.0])
    assert found.peak == 0.0
    assert found.uncertainty == 0.0


def test_shielded_edges_do_not_count():
    """The cube round a sphere is earthed: outside there is no field, inside its edges are re-entrant."""
    ball, box = peaks([shapes.icosphere(0.3, 2), shapes.cube()], [1.0, 0.0])
    assert ball.bounded
    assert box.bounded
    assert box.peak < ball.peak
    # the highest field inside lies at the middle of a face
    assert np.sort(np.abs(box.at))[1] < 0.15
    _, box = peaks([shapes.icosphere(0.3, 2), shapes.cube()], [1.0, 1.0])
    assert not box.bounded


def test_two_sides_of_a_plate_between_plates():
    """A plate at mid potential carries no net charge, yet the field of both gaps."""
    meshes = [shapes.moved(shapes.plate(), z=z) for z in (-0.05, 0.0, 0.05)]
    below, middle, above = peaks(meshes, [-1.0, 0.0, 1.0])
    for one in (below, middle, above):
        assert not one.bounded
        assert one.peak > 20.0
    assert middle.peak < above.peak


def test_bodies_with_two_sides():
    inner, outer = shapes.icosphere(0.5, 1), shapes.icosphere(1.0, 1)
    meshes = [inner, outer, shapes.moved(shapes.plate(), z=2.0), shapes.flipped(shapes.moved(outer, z=-3.0))]
    surface = shapes.surface(meshes)
    creases = find_creases(surface, find_regions(surface)[0])
    assert two_sided_bodies(surface, creases).tolist() == [False, True, True, True]
