"""The sieve for self-contacts against all pairs, computed exactly."""

import numpy as np
import pytest
import trimesh

from daraf.io import self_contact
from daraf.io.bodies import Body
from daraf.io.gaps import Shape


def body(mesh):
    vertices = np.ascontiguousarray(mesh.vertices, dtype=float)
    return Body("part", vertices, np.ascontiguousarray(mesh.faces, dtype=np.int64))


def _moved(mesh, x):
    other = mesh.copy()
    other.apply_translation(x)
    return other


def shapes():
    ball = trimesh.creation.icosphere(3)
    cube = trimesh.creation.box([1, 1, 1]).subdivide().subdivide()
    rng = np.random.default_rng(1)
    flat = ball.copy()
    flat.vertices = flat.vertices * [1.0, 1.0, 1e-3]
    return {
        "ball": ball,
        "crossing": trimesh.util.concatenate([ball, _moved(ball, [0.7, 0.1, 0.2])]),
        "touching": trimesh.util.concatenate([cube, _moved(cube, [1.0, 0.0, 0.0])]),
        "twice": trimesh.util.concatenate([ball, ball.copy()]),
        "soup": trimesh.Trimesh(rng.random((60, 3)), rng.integers(0, 60, (150, 3)), process=False),
        "lens": flat,
        "folded": trimesh.Trimesh(
            [[0, 0, 0], [1, 0, 0], [0, 1, 0], [0.1, 0.9, 1e-7]], [[0, 1, 2], [1, 0, 3]], process=False
        ),
    }


@pytest.mark.parametrize("name", shapes())
def test_sieve_leaves_every_contact(name, monkeypatch):
    shape = Shape(body(shapes()[name]))
    found = {}
    for sieved in (10**9, 0):
        monkeypatch.setattr(self_contact, "_SIEVED", sieved)
        pair, _, crossing = self_contact.self_contacts(shape, 1e-7)
        found[sieved] = sorted(map(tuple, np.column_stack([np.sort(pair, axis=1), crossing]).tolist()))
    assert found[0] == found[10**9]
    assert (len(found[0]) == 0) == (name in ("ball", "lens"))
