"""Flux of one panel through another."""

import numpy as np
import pytest

from daraf.bem.bisection import children
from daraf.bem.field import polygon_field
from daraf.bem.flux import flux_integral
from daraf.bem.frames import NORMAL, POINTS, panel_frames

X, Y, Z = np.eye(3)


def quad(origin, u, v):
    return np.array([origin, origin + u, origin + u + v, origin + v], dtype=np.float64)


def flux(target, source):
    frames = panel_frames(np.array([target, source]))
    return flux_integral(frames[0], frames[1])


def slow_flux(target, source, depth):
    """Twin: the solid angle of the target in closed form at 5 x 5 points on small parts of the source."""
    parts = source[None]
    for _ in range(depth):
        parts = children(parts, np.full(len(parts), 4)).reshape(-1, 4, 3)
    frame = panel_frames(target[None])[0]
    total = 0.0
    for part in panel_frames(parts):
        x, y, z, weight = part[POINTS[5] : POINTS[5] + 100].reshape(4, 25)
        for q in range(25):
            total -= weight[q] * frame[NORMAL : NORMAL + 3] @ np.array(polygon_field(frame, x[q], y[q], z[q]))
    return total


# the tolerance is what the twin leaves: its points crowd nowhere, the integrand is steep at shared edges
PAIRS = {
    "shared-edge-90": (quad(0 * X, X, Y), quad(0 * X, Y, Z), 2e-6),
    "shared-edge-150": (quad(0 * X, X, Y), quad(0 * X, Y, np.array([-0.87, 0, 0.5])), 4e-6),
    "shared-corner": (quad(0 * X, X, Y), quad(0 * X, -X, Z - 0.3 * Y), 4e-6),
    "part-of-an-edge": (quad(0 * X, X, Y), quad(0.25 * Y, 0.5 * Y, Z), 1e-6),
    "parallel": (quad(0 * X, X, Y), quad(0.1 * X + 0.2 * Y + 0.1 * Z, X, Y), 1e-6),
    "nearly-parallel": (quad(0 * X, X, Y), quad(0.1 * X + 0.2 * Y + 0.1 * Z, X + 0.05 * Z, Y - 0.03 * Z), 1e-6),
    "sliver": (quad(0 * X, X, Y), quad(0.1 * X + 0.2 * Y + 0.05 * Z, X, 0.01 * (Y + Z)), 2e-7),
    "middle": (quad(0 * X, X, Y), quad(1.9 * X + 0.2 * Y + 0.5 * Z, 0.6 * X, 0.5 * (Y + Z)), 1e-8),
    "far": (quad(0 * X, X, Y), quad(3.9 * X + 0.2 * Y + 0.5 * Z, 0.6 * X, 0.5 * (Y + Z)), 1e-8),
}


@pytest.mark.parametrize("name", PAIRS)
def test_agrees_with_slow_twin(name):
    target, source, tolerance = PAIRS[name]
    assert flux(target, source) == pytest.approx(slow_flux(target, source, 4), abs=tolerance)


def test_none_in_the_same_plane():
    here, beside = quad(0 * X, X, Y), quad(X, X, Y)
    assert flux(here, here) == 0.0
    assert flux(here, beside) == 0.0


def test_opposite_normals_opposite_sign():
    source = quad(0.3 * X + 0.4 * Z, X, Y)
    assert flux(quad(0 * X, Y, X), source) == pytest.approx(-flux(quad(0 * X, X, Y), source), rel=1e-12)  # rounding


@pytest.mark.parametrize(
    ("source", "turns"),
    [
        (quad(0.3 * X + 0.3 * Y + 0.3 * Z, 0.2 * X, 0.3 * Y + 0.1 * Z), 2),
        (quad(0 * X, X, Y), 1),
        (quad(0.2 * X + 0.2 * Y, 0.3 * X, 0.3 * Y), 1),
        (quad(2.0 * X, X, Y + Z), 0),
        (quad(1.001 * X, Y, Z), 0),
    ],
)
def test_gauss_law_of_a_closed_box(source, turns):
    """Gauss: through a closed surface 4 pi times the charge inside, 2 pi on it, 0 outside."""
    faces = [quad(0 * X, Y, X), quad(Z, X, Y), quad(0 * X, X, Z), quad(Y, Z, X), quad(0 * X, Z, Y), quad(X, Y, Z)]
    area = np.linalg.norm(np.cross(source[1] - source[0], source[3] - source[0]))
    total = sum(flux(face, source) for face in faces)
    # 1e-6 of the area: what the rules promise for a pair, for up to four close faces
    assert total == pytest.approx(2.0 * np.pi * turns * area, abs=4e-6 * area)
