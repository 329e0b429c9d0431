"""Cracks between faces: rims are sewn together, sheets are left alone."""

import numpy as np
import pytest
import trimesh
from hypothesis import given
from hypothesis import strategies as st

from daraf.bem.errors import InputError
from daraf.io.bodies import read_bodies
from daraf.io.changes import Mend
from daraf.io.gaps import Shape
from daraf.io.stitching import stitch
from daraf.io.topology import edges_of

BOX = trimesh.creation.box((10.0, 8.0, 6.0))


def faces_apart(mesh, gap, *, seed=0, finer=()):
    """A mesh whose flat faces have vertices of their own, shifted by up to a gap; some faces twice as fine."""
    rng = np.random.default_rng(seed)
    fine = mesh.subdivide()
    parts = []
    for k, normal in enumerate(np.unique(np.round(mesh.face_normals, 6), axis=0)):
        source = fine if k in finer else mesh
        rows = source.triangles[(source.face_normals @ normal) > 0.999]
        shift = rng.normal(size=3)
        parts.append(rows + gap * shift / np.linalg.norm(shift))
    corners = np.concatenate(parts)
    return trimesh.Trimesh(corners.reshape(-1, 3), np.arange(3 * len(corners)).reshape(-1, 3), process=False)


def is_closed(triangles):
    return bool((edges_of(triangles).count == 2).all())


@pytest.mark.parametrize("finer", [(), (0, 3, 5)])
def test_a_box_with_six_loose_faces_is_closed(finer):
    loose = faces_apart(BOX, 1e-3, finer=finer)
    sewn = stitch(np.array(loose.vertices), np.array(loose.faces), 5e-3)
    assert is_closed(sewn.triangles)
    assert sewn.moved <= 5e-3
    assert bool(sewn.n_divided) == bool(finer)
    closed = trimesh.Trimesh(sewn.vertices, sewn.triangles, process=False)
    # each face moved by 1e-3 of 6 to 10
    assert closed.volume == pytest.approx(480.0, rel=1e-3)


def test_t_junctions_of_equal_coordinates():
    loose = faces_apart(BOX, 0.0, finer=(1, 2))
    sewn = stitch(np.array(loose.vertices), np.array(loose.faces), 1e-9)
    assert is_closed(sewn.triangles)
    assert trimesh.Trimesh(sewn.vertices, sewn.triangles, process=False).volume == pytest.approx(480.0, rel=1e-12)


def test_nothing_to_sew_returns_the_same_arrays():
    sheet = np.array([[0.0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0]])
    triangles = np.array([[0, 1, 2], [0, 2, 3]])
    sewn = stitch(sheet, triangles, 1e-3)
    assert sewn.triangles is triangles
    assert not sewn.changed


def test_a_narrow_end_of_a_sheet_does_not_fold_up():
    # the two corners of the narrow end are neighbours, 1e-4 apart
    strip = np.array([[0.0, 0, 0], [1, 0, 0], [1, 1e-4, 0], [0, 1, 0]])
    triangles = np.array([[0, 1, 2], [0, 2, 3]])
    assert not stitch(strip, triangles, 1e-3).changed


@given(seed=st.integers(0, 2**32 - 1), share=st.floats(0.05, 0.95))
def test_nothing_moves_by_more_than_allowed(seed, share):
    gap = 1e-3
    loose = faces_apart(BOX, gap, seed=seed, finer=(seed % 6,))
    vertices, triangles = np.array(loose.vertices), np.array(loose.faces)
    sewn = stitch(vertices, triangles, 2 * gap * share)
    assert sewn.moved <= 2 * gap * share
    assert np.array_equal(sewn.vertices, vertices)  # merged into existing ones, none invented
    kept = sewn.triangles[np.argsort(sewn.triangles.min(axis=1))]
    assert kept.max() < len(vertices)


def write(path, mesh):
    mesh.export(path)
    return path


def test_safe_lists_and_bold_sews(tmp_path):
    file = write(tmp_path / "cracked.ply", faces_apart(BOX, 2e-4, finer=(0, 4)))
    safe = read_bodies(file, "mm")
    assert len(safe) == 6
    assert {fault.code for body in safe for fault in body.faults} == {"cracks"}
    assert "bold mending sews them" in safe[0].faults[0].remedy
    (bold,) = read_bodies(file, "mm", mend=Mend("bold"))
    assert Shape(bold).volume == pytest.approx(480e-9, rel=1e-3)
    (change,) = bold.notes
    assert change.code == "sewn"
    assert change.count > 0
    assert 0.0 < change.moved <= 1e-4 * bold.diagonal * (1 + 1e-3)
    assert "mm" in change.said("mm")


def test_a_stated_distance_rules(tmp_path):
    file = write(tmp_path / "cracked.ply", faces_apart(BOX, 0.05, finer=(0,)))
    assert len(read_bodies(file, "mm", mend=Mend("bold"))) == 6
    (body,) = read_bodies(file, "mm", mend=Mend("bold", within=0.2e-3))
    assert body.notes[0].moved <= 0.2e-3


def test_list_changes_nothing_and_says_where(tmp_path):
    file = write(tmp_path / "split.ply", faces_apart(BOX, 0.0, finer=(1,)))
    for body in read_bodies(file, "mm", mend=Mend("list")):
        (fault,) = body.faults
        assert fault.code == "cracks"
        assert fault.remedy == "a solve sews them"
        assert not body.notes


@pytest.mark.parametrize("wrong", [{"mode": "gentle"}, {"within": 0.0}, {"within": float("inf")}, {"holes": -1.0}])
def test_bad_wishes_are_refused(wrong):
    with pytest.raises(InputError, match="mend: "):
        Mend(**wrong)
