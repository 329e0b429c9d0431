import numpy as np
import pytest

from daraf.bem.creases import find_creases
from daraf.bem.regions import find_regions
from daraf.bem.sides import two_sided_bodies
from published import shapes

BALL, SHELL = shapes.icosphere(1.0, 1), shapes.icosphere(2.0, 1)
CASES = {
    "solid": ([BALL], [False]),
    "sheet": ([shapes.plate()], [True]),
    "open bowl": ([shapes.bowl(1.0, 1.0, 12, 3)], [True]),
    "open tube": ([shapes.tube(1.0, 2.0, 12)], [True]),
    "ball in a shell": ([BALL, SHELL], [False, True]),
    "ball in a shell turned in": ([BALL, shapes.flipped(SHELL)], [False, True]),
    "cavity alone": ([shapes.flipped(SHELL)], [True]),
    "side by side": ([BALL, shapes.moved(BALL, x=3.0)], [False, False]),
    "in the hole of a ring": ([shapes.torus(2.0, 0.3), shapes.icosphere(0.5, 1)], [False, False]),
    "small and far": ([shapes.moved(shapes.scaled(BALL, 1e-3), x=1e2)], [False]),
}


@pytest.mark.parametrize(("meshes", "expected"), CASES.values(), ids=CASES.keys())
def test_two_sided_bodies(meshes, expected):
    surface = shapes.surface(meshes)
    regions = find_regions(surface)[0]
    found = two_sided_bodies(surface, find_creases(surface, regions))
    np.testing.assert_array_equal(found, expected)
