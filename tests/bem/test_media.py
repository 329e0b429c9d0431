"""Media: sides of the surfaces, free charge, adjoint and estimate."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from daraf.bem import InputError
from daraf.bem.bisection import split_panels
from daraf.bem.flats import make_panels
from daraf.bem.images import Images
from daraf.bem.media import METAL, Media
from daraf.bem.media_adaptive import MediaPlan, media_pass
from daraf.bem.media_matrix import media_integrals, system_matrix
from published import shapes as S  # noqa: N812


def quiet(*_):
    return None


def solved(surface, media, splits=()):
    panels, _ = make_panels(surface)
    for split in splits:
        panels, _ = split_panels(panels, split(panels))
    n = len(panels)
    plan = MediaPlan(panels, np.zeros((n, 2), bool), np.full((n, 4), 0.25), np.zeros(surface.n_bodies, np.int64))
    return media_pass(plan, media, Images(), quiet)


def all_panels(panels):
    return np.full(len(panels), 3)


def coated_cube(ratio):
    return S.surface([S.cube(0.5), S.cube(1.0)]), Media(np.array([1.0, ratio]), [1, 0], [METAL, 1], 1)


def test_refuses_what_does_not_fit():
    with pytest.raises(InputError, match="at least 1"):
        Media(np.array([0.5]), [0], [METAL], 1)
    with pytest.raises(InputError, match="at least 1"):
        Media(np.array([np.nan]), [0], [METAL], 1)
    with pytest.raises(InputError, match="negative imaginary part"):
        Media(np.array([1.0 + 0.1j]), [0], [METAL], 1)
    with pytest.raises(InputError, match="does not exist"):
        Media(np.array([1.0]), [1], [METAL], 1)
    with pytest.raises(InputError, match="either side"):
        Media(np.array([1.0, 2.0]), [1, 0], [METAL, METAL], 1).check(S.surface([S.cube(0.5), S.cube(1.0)]))


def test_refuses_an_open_dielectric():
    vertices, triangles = S.cube(1.0)
    surface = S.surface([S.cube(0.5), (vertices, triangles[:-2])])
    with pytest.raises(InputError, match="not closed"):
        solved(surface, Media(np.array([1.0, 4.0]), [1, 0], [METAL, 1], 1))


def test_one_medium_is_the_symmetric_galerkin_system():
    surface = S.surface([S.cube(1.0), S.moved(S.cube(0.5), 1.5)])
    found = solved(surface, Media(np.array([3.0]), [0, 0], [METAL, METAL], 2), [all_panels])
    # rounding of two different solvers
    assert_allclose(found.adjoint, 3.0 * found.state, rtol=1e-9)
    assert found.defect.max() < 1e-12
    assert_allclose(found.gains[0].left, 3.0 * found.gains[0].right, rtol=1e-6, atol=1e-9)


def test_equal_permittivities_make_the_interface_vanish():
    surface, _ = coated_cube(4.0)
    found = solved(surface, Media(np.array([2.0, 2.0]), [1, 0], [METAL, 1], 1), [all_panels])
    alone = solved(S.surface([S.cube(0.5)]), Media(np.array([2.0]), [0], [METAL], 1), [all_panels])
    # rounding of solving with and without rows that decouple
    assert_allclose(found.value, alone.value, rtol=1e-12)
    assert np.abs(found.state[0][found.panels.body == 1]).max() < 1e-12


@pytest.mark.parametrize("ratio", [4.0, 1e4])
def test_gauss_law_is_exact(ratio):
    """Free charge on the conductor = vacuum charge of everything inside the interface = its total flux."""
    surface, media = coated_cube(ratio)
    found = solved(surface, media, [all_panels])
    total = found.state[0][:, 0] @ found.panels.areas
    # the flux outside is that of all charge, bound ones included; rounding times the ratio
    assert found.value[0, 0, 0] == pytest.approx(total, rel=1e-15 * ratio + 1e-12)


def test_adjoint_is_the_free_charge_and_minus_the_potential():
    surface, media = coated_cube(10.0)
    found = solved(surface, media, [all_panels] * 2)
    metal = found.panels.body == 0
    state, adjoint = found.state[0][:, 0], found.adjoint[0][:, 0]
    # free charge density is 10 x the total one; both are approximations: 2 % in the mean at 16 panels a face
    areas = found.panels.areas[metal]
    assert adjoint[metal] @ areas == pytest.approx(10.0 * state[metal] @ areas, rel=0.02)
    assert np.all((adjoint[~metal] < 0.0) & (adjoint[~metal] > -1.0))


@pytest.mark.parametrize("body", [0, 1])
def test_gain_is_what_splitting_one_panel_gains(body):
    surface, media = coated_cube(10.0)
    before = solved(surface, media, [all_panels])
    panel = int(np.flatnonzero(before.panels.body == body)[0])

    def one(panels):
        split = np.zeros(len(panels), np.int64)
        split[panel] = 1
        return split

    after = solved(surface, media, [all_panels, one])
    gains = before.gains[0]
    promised = (gains.left * gains.right)[panel, 0, 0]
    # exact up to the coupling of the new function with all others, as the symmetric indicator
    assert (after.value - before.value)[0, 0, 0] == pytest.approx(promised, rel=0.35)


def test_free_charge_at_a_contact_uses_one_permittivity_inside():
    """A metal cube on a dielectric one: fluxes of the contact face are read on the dielectric's side."""
    surface, media = metal_on_dielectric(80.0)
    panels, _ = make_panels(surface)
    at = media.at(panels)
    contact = panels.body == 1
    assert np.all(at.inside[panels.conductor == 0] == 1.0)
    assert np.all(at.crossed == (contact | (panels.body == 2)))
    _, _, charge = system_matrix(media_integrals(panels, at), at, panels)
    assert charge.shape == (1, len(panels))


def faces(mesh, chosen):
    """The triangles of a mesh whose unit normals `chosen` picks, and the others."""
    vertices, triangles = mesh
    a, b, c = (vertices[triangles[:, k]] for k in range(3))
    normals = np.cross(b - a, c - a)
    pick = np.array([chosen(n / np.linalg.norm(n)) for n in normals])
    return (vertices, triangles[pick]), (vertices, triangles[~pick])


def metal_on_dielectric(ratio):
    bottom, others = faces(S.moved(S.cube(1.0), z=1.0), lambda n: n[2] < -0.9)
    _, open_box = faces(S.cube(1.0), lambda n: n[2] > 0.9)
    surface = S.surface([[others, bottom], open_box])
    return surface, Media(np.array([1.0, ratio]), [0, 1, 0], [METAL, METAL, 1], 1)
