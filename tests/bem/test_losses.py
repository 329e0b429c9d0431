"""Losses: complex permittivities and conductances."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from daraf.bem import EPSILON_0, InputError
from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.images import Images, MirrorPlane
from daraf.bem.losses import admittance, complex_permittivity, conductance_by_duality
from daraf.bem.media import METAL, Media
from daraf.bem.media_solve import solve_media
from published import shapes as S  # noqa: N812
from published.media_cases import coated, split_faces


def test_permittivity_by_hand():
    found = complex_permittivity([1.0, 4.0], [0.0, 0.02], [0.0, 1e-9], [50.0, 1e3])
    assert_allclose(found[0], 1.0)
    assert found[1, 0] == pytest.approx(4.0 - 0.08j - 1e-9j / (2 * np.pi * 50.0 * EPSILON_0), rel=1e-14)  # rounding


def test_refuses_nonsense():
    with pytest.raises(InputError, match="loss tangent"):
        complex_permittivity([1.0], [-0.1], [0.0], [1.0])
    with pytest.raises(InputError, match="frequency"):
        complex_permittivity([1.0], [0.0], [0.0], [0.0])
    with pytest.raises(InputError, match="conductivity"):
        conductance_by_duality([[1.0]], [[0.0]], 0.0)


def test_coated_sphere_over_frequency():
    """Conducting coat: capacitance and conductance of two layers in series at every frequency (elementary)."""
    frequency = np.array([10.0, 300.0, 1e4])
    permittivity = complex_permittivity([1.0, 4.0], [0.0, 0.0], [0.0, 1e-7], frequency)
    surface = S.surface([S.icosphere(1.0, 2), S.icosphere(1.5, 2)])
    found = admittance(solve_media(surface, Media(permittivity, [1, 0], [METAL, 1], 1), accuracy=0.01), frequency)
    exact = FOUR_PI_EPSILON_0 * np.array([coated(1.0, 1.5, e) for e in permittivity[1]])
    omega = 2.0 * np.pi * frequency
    assert np.all(np.abs(found.capacitance[:, 0, 0] - exact.real) <= found.capacitance_uncertainty[:, 0, 0])
    error = np.abs(found.conductance[:, 0, 0] + omega * exact.imag)
    assert np.all(error <= found.conductance_uncertainty[:, 0, 0])
    # the conductance is no worse than one part in a hundred of the capacitance's admittance, which was asked
    assert np.all(found.conductance_uncertainty[:, 0, 0] <= 0.01 * omega * np.abs(exact))


def test_one_loss_tangent_everywhere_is_that_of_every_coupling():
    permittivity = complex_permittivity([3.0], [0.01], [0.0], [50.0])
    surface = S.surface([S.cube(1.0), S.moved(S.cube(1.0), 1.5)])
    solution = solve_media(surface, Media(permittivity, [0, 0], [METAL, METAL], 2), accuracy=0.05)
    assert_allclose(admittance(solution, [50.0]).loss_tangent[0], 0.01, rtol=1e-9)  # rounding


def test_hemispherical_earth_electrode():
    """R = rho / (2 pi a) of a half sphere flush with the soil's surface (elementary)."""
    lower, _ = split_faces(S.uv_sphere(1.0, 32, 16), lambda n: bool(n[5] < 0.0))
    soil = Images((MirrorPlane(np.zeros(3), np.array([0.0, 0.0, 1.0]), False),))
    solution = solve_media(S.surface([lower]), Media(np.array([1.0]), [0], [METAL], 1), images=soil, accuracy=0.01)
    value, spread = conductance_by_duality(solution.maxwell[0], solution.maxwell_uncertainty[0], 0.01)
    assert abs(value[0, 0] - 2.0 * np.pi * 0.01) <= spread[0, 0]
