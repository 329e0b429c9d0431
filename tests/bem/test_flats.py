"""Panels for flat regions."""

import manifold3d
import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

import daraf.bem.flats
from daraf.bem.flats import make_panels, panel_regions
from daraf.bem.mosaic import corner_sines, cover, is_triangle, panel_areas, rectangles
from daraf.bem.outlines import Outline, clean_loop, trace_loops
from daraf.bem.regions import find_regions
from daraf.bem.surface import Surface

TILT = Rotation.from_euler("xyz", [0.3, -1.1, 0.7]).as_matrix()


def from_solid(solid, *, tilt=False, single=False):
    mesh = solid.to_mesh64()
    vertices = np.array(mesh.vert_properties)[:, :3]
    triangles = np.array(mesh.tri_verts).astype(np.int64)
    if tilt:
        vertices = vertices @ TILT.T
    if single:
        vertices = vertices.astype(np.float32).astype(float)
    return Surface(vertices, triangles, np.zeros(len(triangles), int), np.zeros(1, int))


def extruded(points):
    return manifold3d.Manifold.extrude(manifold3d.CrossSection([np.asarray(points, float)]), 3.0)


def drilled_plate():
    plate = manifold3d.Manifold.cube((100, 60, 5))
    for x, y, radius in [(20, 20, 6), (60, 30, 12), (85, 45, 4), (85, 12, 2)]:
        plate -= manifold3d.Manifold.cylinder(20, radius, radius, 48).translate((x, y, -5))
    return plate


def rounded_bar():
    corners = manifold3d.CrossSection.square((90, 50)).offset(5, manifold3d.JoinType.Round, circular_segments=32)
    return manifold3d.Manifold.extrude(corners, 4)


def gear():
    angle = np.linspace(0, 2 * np.pi, 81)[:-1]
    radius = np.where((np.arange(80) // 2) % 2, 45, 50)
    wheel = extruded(np.c_[radius * np.cos(angle), radius * np.sin(angle)])
    return wheel - manifold3d.Manifold.cylinder(20, 10, 10, 32).translate((0, 0, -5))


def crossed_pipes():
    across = manifold3d.Manifold.cylinder(60, 8, 8, 60).rotate((0, 90, 0))
    return manifold3d.Manifold.cylinder(60, 10, 10, 60).translate((0, 0, -30)) + across


SOLIDS = {
    "box": lambda: manifold3d.Manifold.cube((3, 2, 1)),
    "drilled plate": drilled_plate,
    "rounded bar": rounded_bar,
    "disc": lambda: manifold3d.Manifold.cylinder(5, 50, 50, 48),
    "ring": lambda: (
        manifold3d.Manifold.cylinder(5, 50, 50, 64)
        - manifold3d.Manifold.cylinder(50, 42, 42, 48).translate((3, 0, -10))
    ),
    "gear": gear,
    "crossed pipes": crossed_pipes,
    "frame": lambda: (
        manifold3d.Manifold.cube((100, 60, 5)) - manifold3d.Manifold.cube((60, 30, 50)).translate((20, 10, -9))
    ),
    "star": lambda: extruded([[50, 0], [9, 7], [0, 50], [-9, 7], [-50, 0], [-9, -7], [0, -50], [9, -7]]),
}


def surface_areas(surface):
    p = surface.vertices[surface.triangles]
    return 0.5 * np.linalg.norm(np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]), axis=1)


def check_panels(surface, regions, panels, *, area=1e-9):
    """Area per region, orientation, flatness, convexity."""
    of_region = np.bincount(panels.region, panels.areas, minlength=len(regions))
    assert of_region == pytest.approx(regions.areas, rel=area)
    normals = regions.normals[panels.region]
    assert np.einsum("ij,ij->i", panels.normals, normals) == pytest.approx(np.ones(len(panels)), abs=1e-6)
    into = panels.corners - np.roll(panels.corners, 1, axis=1)
    turn = np.einsum("nki,ni->nk", np.cross(into, np.roll(into, -1, axis=1)), normals)
    assert turn[panels.n_corners == 4].min() > 0
    triangles = panels.corners[panels.n_corners == 3]
    assert (triangles[:, 2] == triangles[:, 3]).all()
    height = np.einsum("nki,ni->nk", panels.corners - panels.corners[:, :1], normals)
    size = np.ptp(surface.vertices, axis=0).max()
    quads = panels.n_corners == 4
    assert np.abs(height[quads]).max(initial=0) < 1e-12 * size
    assert (panels.body == regions.body[panels.region]).all()
    assert (panels.conductor == surface.body_conductor[panels.body]).all()


def count_covering(corners, points):
    """How many panels (n, 4, 2) each point (m, 2) lies in; -1 for points next to a side."""
    side = np.roll(corners, -1, axis=1) - corners
    length = np.linalg.norm(side, axis=2)
    away = points[:, None, None, :] - corners
    cross = side[..., 0] * away[..., 1] - side[..., 1] * away[..., 0]
    distance = np.where(length > 0, cross / np.where(length > 0, length, 1), np.inf)
    inside = (distance > 0).all(axis=2).sum(axis=1)
    scale = np.abs(corners).max()
    unclear = (np.abs(distance).min(axis=2) < 1e-9 * scale).any(axis=1)
    return np.where(unclear, -1, inside)


def check_cover(outline, corners, *, seed=1):
    areas = panel_areas(corners)
    assert areas.min() > 0
    assert areas.sum() == pytest.approx(outline.area, rel=1e-9)
    assert corner_sines(corners[~is_triangle(corners)]).min(initial=1) > 0
    low, high = outline.loops[0].min(axis=0), outline.loops[0].max(axis=0)
    points = np.random.default_rng(seed).uniform(low, high, (400, 2))
    expected = shapely.contains_xy(outline.polygon(), points).astype(int)
    found = count_covering(corners, points)
    clear = found >= 0
    assert clear.sum() > 300
    np.testing.assert_array_equal(found[clear], expected[clear])


@pytest.mark.parametrize("name", SOLIDS)
@pytest.mark.parametrize("single", [False, True])
def test_solids(name, single):
    surface = from_solid(SOLIDS[name](), tilt=single, single=single)
    regions, notices = find_regions(surface)
    panels, more = panel_regions(surface, regions)
    assert not notices
    assert not more
    # Straightening an outline within the rounding of single precision (1e-7 of the body) changes small faces.
    check_panels(surface, regions, panels, area=2e-4 if single else 1e-9)
    assert panels.areas.sum() == pytest.approx(surface_areas(surface).sum(), rel=1e-6 if single else 1e-12)


@pytest.mark.parametrize(
    ("name", "most"), [("box", 6), ("frame", 16), ("ring", 64 + 48 + 2 * 150), ("disc", 48 + 2 * 100)]
)
def test_few_panels(name, most):
    assert len(make_panels(from_solid(SOLIDS[name]()))[0]) <= most


@pytest.mark.parametrize("name", ["drilled plate", "disc", "star", "rounded bar"])
def test_every_outline_edge_lies_on_quadrilaterals(name):
    surface = from_solid(SOLIDS[name]())
    regions, _ = find_regions(surface)
    panels, _ = panel_regions(surface, regions)
    top = max(range(len(regions)), key=lambda r: regions.areas[r] * (regions.normals[r, 2] > 0.9))
    corners = panels.corners[(panels.region == top) & (panels.n_corners == 4), :, :2]
    triangles = surface.vertices[surface.triangles[regions.triangles_of(top)]][..., :2]
    rim = shapely.union_all(shapely.polygons(triangles)).boundary
    middles = 0.5 * (corners + np.roll(corners, -1, axis=1))
    sides = np.linalg.norm(np.roll(corners, -1, axis=1) - corners, axis=2)
    on_rim = shapely.distance(rim, shapely.points(middles)) < 1e-9
    assert sides[on_rim].sum() == pytest.approx(rim.length, rel=1e-9)


@st.composite
def polygons(draw):
    """Random star-shaped polygons with up to three holes, some round, some ragged."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32)))
    n = draw(st.integers(5, 40))
    angle = np.sort((np.arange(n) + rng.uniform(-0.4, 0.4, n)) * 2 * np.pi / n)
    radius = rng.uniform(draw(st.sampled_from([0.2, 0.7, 0.999])), 1.0, n)
    shape = shapely.Polygon(np.c_[radius * np.cos(angle), radius * np.sin(angle)])
    for _ in range(draw(st.integers(0, 3))):
        centre, size = rng.uniform(-0.6, 0.6, 2), rng.uniform(0.02, 0.25)
        corners = rng.integers(3, 30)
        turn = np.arange(corners) * 2 * np.pi / corners + rng.uniform(0, 6)
        hole = shapely.Polygon(centre + size * np.c_[np.cos(turn), np.sin(turn)])
        if shape.contains(hole.buffer(0.01)):
            shape = shape.difference(hole)
    return shapely.orient_polygons(shape)


def outline_of(polygon):
    return Outline.all_sharp([np.array(ring.coords)[:-1] for ring in (polygon.exterior, *polygon.interiors)])


@given(polygons())
@settings(max_examples=60)
def test_any_polygon_is_covered_once(polygon):
    outline = outline_of(polygon)
    check_cover(outline, cover(outline, 1e-9))


@given(polygons(), st.integers(0, 2**32), st.booleans())
@settings(max_examples=40)
def test_any_triangulation_of_a_polygon_gives_its_area(polygon, seed, single):
    rng = np.random.default_rng(seed)
    pieces = shapely.get_parts(shapely.constrained_delaunay_triangles(polygon))
    corners = shapely.get_coordinates(pieces).reshape(-1, 4, 2)[:, 2::-1]
    # Points close to a corner or a side of every other triangle turn good triangles into slivers.
    share = rng.dirichlet([0.3, 0.3, 0.3], len(corners))[:, :, None]
    middle = (share * corners).sum(axis=1)
    cut = rng.random(len(corners)) < 0.5
    parts = [corners[~cut]]
    for k in range(3):
        parts.append(np.stack([corners[cut, k], corners[cut, (k + 1) % 3], middle[cut]], axis=1))
    flat, triangles = np.unique(np.concatenate(parts).reshape(-1, 2), axis=0, return_inverse=True)
    vertices = np.c_[flat, np.zeros(len(flat))] @ TILT.T + 0.5
    if single:
        vertices = vertices.astype(np.float32).astype(float)
    surface = Surface(vertices, triangles.reshape(-1, 3), np.zeros(len(triangles) // 3, int), np.zeros(1, int))
    panels, notices = make_panels(surface)
    assert "raw-triangles" not in [n.code for n in notices]
    # vertices within the flat tolerance (2e-6 of the diagonal) of a straight side are dropped
    assert panels.areas.sum() == pytest.approx(polygon.area, abs=2e-5)
    assert set(panels.region) == {0}


@pytest.mark.parametrize(
    ("loops", "count"),
    [
        ([[[0, 0], [4, 0], [4, 1], [1, 1], [1, 3], [0, 3]]], 2),
        ([[[0, 0], [4, 0], [4, 3], [3, 3], [3, 1], [1, 1], [1, 3], [0, 3]]], 3),
        ([[[0, 0], [9, 0], [9, 9], [0, 9]], [[3, 3], [3, 6], [6, 6], [6, 3]]], 4),
        ([[[0, 0], [5, 0], [5, 5], [3, 5], [3, 4], [2, 4], [2, 5], [0, 5]]], 3),
    ],
)
def test_rectilinear_outlines_become_rectangles(loops, count):
    turn = TILT[:2, :2] / np.sqrt(np.abs(np.linalg.det(TILT[:2, :2])))
    turn = np.linalg.qr(turn)[0]
    turn *= np.sign(np.linalg.det(turn))
    turn = turn if np.linalg.det(turn) > 0 else turn[::-1]
    outline = Outline.all_sharp([np.array(loop, float) @ turn.T for loop in loops])
    found = rectangles(outline, 1e-9)
    assert len(found) == count
    assert corner_sines(found) == pytest.approx(np.ones((count, 4)), abs=1e-9)
    check_cover(outline, found)


def test_oblique_outline_is_not_rectilinear():
    assert rectangles(Outline.all_sharp([np.array([[0, 0], [4, 0], [4, 3], [1, 3.0]])]), 1e-9) is None


def test_cleaning_drops_straight_vertices_but_keeps_a_fine_circle():
    square = np.array([[0, 0], [1, 1e-9], [2, 0], [2, 2], [1, 2], [0, 2], [0, 1.0]])
    assert len(clean_loop(square, 1e-6)) == 4
    angle = np.linspace(0, 2 * np.pi, 2001)[:-1]
    circle = np.c_[np.cos(angle), np.sin(angle)]
    assert len(clean_loop(circle, 1e-6)) == 2000  # one edge's sagitta is 1.2e-6
    coarse = circle[clean_loop(circle, 1e-4)]  # 18 edges' sagitta is 4e-4: about nine join
    assert 150 < len(coarse) < 400
    assert np.abs(shapely.distance(shapely.LinearRing(coarse), shapely.points(circle))).max() < 1.01e-4


def test_loops_that_touch_in_a_vertex_or_along_a_slit():
    flat = {0: (0.0, 0.0), 1: (1.0, 0.0), 2: (1.0, 1.0), 3: (2.0, 1.0), 4: (2.0, 2.0)}
    loops = trace_loops(np.array([[0, 1, 2], [2, 3, 4]]), flat)
    assert sorted(map(sorted, loops)) == [[0, 1, 2], [2, 3, 4]]


def test_a_branching_sheet_is_covered():
    # A rib stands on a plate: the shared edge belongs to three triangles and splits no area.
    vertices = np.array([[0, 0, 0], [2, 0, 0], [2, 1, 0], [0, 1, 0], [0, 2, 0], [2, 2, 0], [0, 1, 1], [2, 1, 1.0]])
    triangles = [[0, 1, 2], [0, 2, 3], [3, 2, 5], [3, 5, 4], [3, 2, 7], [3, 7, 6]]
    surface = Surface(vertices, np.array(triangles), np.zeros(6, int), np.zeros(1, int))
    panels, notices = make_panels(surface)
    assert not notices
    assert panels.areas.sum() == pytest.approx(6.0)


def test_trouble_in_one_region_falls_back_to_its_triangles(monkeypatch):
    def fail(outline, tolerance):
        raise ValueError("trouble")

    monkeypatch.setattr(daraf.bem.flats, "cover", fail)
    surface = from_solid(SOLIDS["frame"]())
    panels, notices = make_panels(surface)
    assert [n.code for n in notices] == ["raw-triangles"]
    assert panels.areas.sum() == pytest.approx(surface_areas(surface).sum())


def test_curved_parts_keep_their_triangles():
    surface = from_solid(manifold3d.Manifold.sphere(1.0, 24), tilt=True)
    panels, _ = make_panels(surface)
    assert panels.areas.sum() == pytest.approx(surface_areas(surface).sum())
    assert (panels.n_corners == 3).mean() > 0.5
