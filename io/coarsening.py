"""Round parts that are finer than the answer needs: fewer facets, within a distance that is told.

The facets are merged by quadric error metrics (Garland and Heckbert, SIGGRAPH 1997, 209; VTK), which keep flat
faces and sharp edges. VTK knows no distance there, so the strongest reduction that stays within the tolerance is
searched, with the distance measured both ways. What is left of it on
each triangle enters the budget.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from daraf.bem.creases import find_creases
from daraf.bem.facets import find_facets

from .bodies import Body
from .changes import Change
from .flat_faces import flat_faces, surface_of
from .gaps import Shape
from .mending import flat_height
from .self_contact import self_contacts
from .topology import edges_of, signed_volume

if TYPE_CHECKING:
    from vtkmodules.vtkCommonDataModel import vtkPolyData

__all__ = ["MOST_FACES", "Coarsened", "coarsen", "coarsen_bodies", "count_faces", "wanted_tolerance"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: A drawing of more flat faces than this is coarsened by itself: each needs a panel at least, before any is spent
#: on accuracy, and a dense solve takes 15,000.
MOST_FACES = 4000
#: Bodies with fewer flat faces are not worth it.
_WORTHWHILE = 500
#: Largest move, per accuracy asked: of the size of the body, and of its gap to another conductor. The capacitance of
#: a body changes by no more than a few times the first, that of a gap by about the second.
_OF_SIZE, _OF_GAP = 0.1, 0.2
#: Steps of the search for the strongest reduction.
_STEPS = 7


@dataclass(frozen=True, eq=False)
class Coarsened:
    """A body with fewer facets.

    Attributes
    ----------
    body : Body
    moved : (nt,) float, m
        Largest distance found between each triangle and the drawing.
    deviation : (nt,) float, m
        The same, and how far the drawing's own facets may lie from the round surface they stand for.
    """

    body: Body
    moved: FloatArray
    deviation: FloatArray


def count_faces(body: Body) -> int:
    """Number of flat faces of a body: the fewest panels that follow its drawing."""
    return len(flat_faces(body))


def wanted_tolerance(body: Body, gap: float, accuracy: float) -> float:
    """Distance within which a body may be coarsened if nothing is stated, m.

    Parameters
    ----------
    body : Body
    gap : float, m
        To the nearest other conductor; infinite if there is none.
    accuracy : float
        Relative, as asked.
    """
    return accuracy * min(_OF_SIZE * body.diagonal, _OF_GAP * gap)


def coarsen_bodies(
    bodies: Sequence[Body], gaps: Sequence[float], accuracy: float, stated: float | str
) -> tuple[list[Body], list[FloatArray]]:
    """Coarsen bodies where that is asked, or where the drawing is finer than can be solved.

    Parameters
    ----------
    bodies : sequence of Body
    gaps : sequence of float, m
        From each to the nearest other conductor.
    accuracy : float
    stated : float (m), "auto" or "no"

    Returns
    -------
    bodies : list of Body
        What was done stands in the notes.
    deviation : list of (nt,) float, m
        Of each triangle; 0 where nothing was done.
    """
    result, deviation = list(bodies), [np.zeros(len(body.triangles)) for body in bodies]
    if stated == "no" or not bodies:
        return result, deviation
    faces = [count_faces(body) if len(body.triangles) > _WORTHWHILE else 0 for body in bodies]
    if stated == "auto" and sum(faces) <= MOST_FACES:
        return result, deviation
    for k, body in enumerate(bodies):
        if faces[k] <= _WORTHWHILE:
            continue
        tolerance = wanted_tolerance(body, gaps[k], accuracy) if isinstance(stated, str) else stated
        found = coarsen(body, tolerance)
        if found is None:
            text = (
                f"left {faces[k]:,} flat faces as they are: fewer do not follow them within the distance allowed, "
                "or the body is open, branches or crosses itself"
            )
            result[k] = replace(body, notes=[*body.notes, Change("not-coarsened", faces[k], None, text)])
            continue
        left = count_faces(found.body)
        text = (
            f"coarsened {faces[k]:,} flat faces to {left:,}, "
            f"by {float(found.moved.mean()) / body.diagonal:.1g} of the body on average"
        )
        note = Change("coarsened", faces[k] - left, None, text, float(found.moved.max()))
        result[k] = replace(found.body, notes=[*body.notes, note])
        deviation[k] = found.deviation
    return result, deviation


def coarsen(body: Body, tolerance: float) -> Coarsened | None:
    """Merge facets of a closed body as far as nothing moves by more than a tolerance.

    Parameters
    ----------
    body : Body
        Wound outwards.
    tolerance : float, m

    Returns
    -------
    Coarsened or None
        None if the body is open, branches, crosses itself, or if hardly anything is gained.
    """
    if (edges_of(body.triangles).count != 2).any() or self_contacts(Shape(body), 2.0 * flat_height(body))[2].any():
        return None
    drawing = _Drawing(body)
    best: Coarsened | None = None
    low, high = 0.0, 1.0
    for _ in range(_STEPS):
        share = 0.5 * (low + high)
        tried = drawing.reduced(share, tolerance)
        if tried is None:
            high = share
        else:
            best, low = tried, share
    return best if best is not None and len(best.body.triangles) < 0.8 * len(body.triangles) else None


class _Drawing:
    """The body as drawn, ready to be reduced and compared."""

    def __init__(self, body: Body) -> None:
        self.body = body
        self.middle, self.size = body.box.mean(axis=0), body.diagonal
        self.volume = signed_volume(body.vertices, body.triangles)
        self.points = _samples(body.vertices[body.triangles])
        self.surface = _Nearest(body.vertices, body.triangles)
        self.depth = _facet_depths(body)

    def reduced(self, share: float, tolerance: float) -> Coarsened | None:
        """The body without a share of its triangles; None if it moves too far or is no proper body any more."""
        body = self.body
        vertices, triangles = _merged((body.vertices - self.middle) / self.size, body.triangles, share)
        vertices = vertices * self.size + self.middle
        if len(triangles) < 4 or (edges_of(triangles).count != 2).any():
            return None
        back, nearest = _Nearest(vertices, triangles)(self.points)
        if back.max() > tolerance:
            return None
        there, under = self.surface(_samples(vertices[triangles]))
        if there.max() > tolerance or signed_volume(vertices, triangles) * self.volume <= 0.0:
            return None
        made = replace(body, vertices=vertices, triangles=triangles)
        if self_contacts(Shape(made), 2.0 * flat_height(made))[2].any():
            return None
        moved = there.reshape(-1, len(triangles)).max(axis=0)
        np.maximum.at(moved, nearest, back)
        return Coarsened(made, moved, moved + self.depth[under].reshape(-1, len(triangles)).max(axis=0))


def _poly_data(vertices: FloatArray, triangles: IntArray) -> "vtkPolyData":
    from vtkmodules.util.numpy_support import numpy_to_vtk, numpy_to_vtkIdTypeArray
    from vtkmodules.vtkCommonCore import vtkPoints
    from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkPolyData

    points, cells, data = vtkPoints(), vtkCellArray(), vtkPolyData()
    points.SetData(numpy_to_vtk(np.ascontiguousarray(vertices), deep=True))
    offsets = np.arange(0, triangles.size + 1, 3, dtype=np.int64)
    index = np.ascontiguousarray(triangles.ravel())
    cells.SetData(numpy_to_vtkIdTypeArray(offsets, deep=True), numpy_to_vtkIdTypeArray(index, deep=True))
    data.SetPoints(points)
    data.SetPolys(cells)
    return data


def _merged(vertices: FloatArray, triangles: IntArray, share: float) -> tuple[FloatArray, IntArray]:
    """The surface without a share of its triangles, as near to the drawing as VTK can make it."""
    from vtkmodules.util.numpy_support import vtk_to_numpy
    from vtkmodules.vtkFiltersCore import vtkQuadricDecimation

    merging = vtkQuadricDecimation()
    merging.SetInputData(_poly_data(vertices, triangles))
    merging.SetTargetReduction(share)
    merging.Update()
    data = merging.GetOutput()
    points = vtk_to_numpy(data.GetPoints().GetData()).astype(np.float64)
    return points, vtk_to_numpy(data.GetPolys().GetConnectivityArray()).reshape(-1, 3).astype(np.int64)


def _facet_depths(body: Body) -> FloatArray:
    """How far the round surface that each triangle of a drawing stands for lies from it, (nt,) m."""
    surface, regions = surface_of(body), flat_faces(body)
    offset = find_facets(surface, regions, find_creases(surface, regions)).offset
    return np.where(regions.triangle_region >= 0, np.abs(offset)[regions.triangle_region], 0.0)


def _samples(corners: FloatArray) -> FloatArray:
    """Corners, middles of the sides and centroids of triangles, (7 n, 3) m, triangle by triangle."""
    sides = 0.5 * (corners + np.roll(corners, -1, axis=1))
    return np.concatenate([*np.moveaxis(corners, 1, 0), *np.moveaxis(sides, 1, 0), corners.mean(axis=1)])


class _Nearest:
    """Distance of points from a surface, and the triangle that is nearest."""

    def __init__(self, vertices: FloatArray, triangles: IntArray) -> None:
        from vtkmodules.vtkCommonDataModel import vtkStaticCellLocator

        self._data = _poly_data(vertices, triangles)
        self._locator = vtkStaticCellLocator()
        self._locator.SetDataSet(self._data)
        self._locator.BuildLocator()

    def __call__(self, points: FloatArray) -> tuple[FloatArray, IntArray]:
        from vtkmodules.vtkCommonCore import reference

        distance, cell = np.empty(len(points)), np.empty(len(points), dtype=np.int64)
        find: Any = self._locator.FindClosestPoint  # answers through its arguments
        found, part = [0.0] * 3, reference(0)
        number: Any = reference(0)
        square: Any = reference(0.0)
        for k, point in enumerate(points.tolist()):
            find(point, found, number, part, square)
            distance[k], cell[k] = square.get() ** 0.5, number.get()
        return distance, cell
