"""Field lines: followed step by step through the closed-form field until they meet a surface or leave."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.integrate import RK45

from .errors import InputError
from .off_surface import PanelSum
from .panels import Panels
from .probing import ChargedPanels

__all__ = ["FieldLine", "field_line", "nearest_on_panels"]

FloatArray = NDArray[np.float64]

#: Relative error of each step. A line followed for its field strength need not end at the right atom.
RTOL = 1e-5
#: Largest step in diagonals of the model's box; a line that is so many diagonals from its middle has left.
LARGEST_STEP, LEFT = 0.02, 3.0
#: Largest step in distances from the nearest panel plus a quarter of its radius: surfaces are not stepped over.
NEAR_STEP = 0.7
MOST_STEPS = 5000
#: A start within so many radii of a panel counts as on it; lines start so many radii above it.
ON_SURFACE, LIFT = 0.5, 1e-6


@dataclass(frozen=True, eq=False)
class FieldLine:
    """A field line.

    Attributes
    ----------
    points : (n, 3) float, m
        From the start to where it ends; both on surfaces where it meets them.
    distance : (n,) float, m
        Along the line.
    starts_on, ends_on : int
        Conductor, or -1 in free space.
    """

    points: FloatArray
    distance: FloatArray
    starts_on: int
    ends_on: int


def field_line(charged: ChargedPanels, start: ArrayLike, normal: ArrayLike | None = None) -> FieldLine:
    """Follow the field line through a point.

    Parameters
    ----------
    charged : ChargedPanels
    start : (3,) float, m
        On a surface: the line leaves it. In free space: it is followed both ways.
    normal : (3,) float, optional
        Side on which it leaves a surface; by default the side with the stronger field.

    Returns
    -------
    FieldLine

    Raises
    ------
    InputError
        If the start is not finite, or there is no field.
    """
    point = np.asarray(start, dtype=np.float64)
    if point.shape != (3,) or not np.isfinite(point).all():
        raise InputError(f"field line: the start must be three finite numbers, not {start!r}")
    panels = charged.panels
    tracer = _Tracer(panels, PanelSum(panels.corners, charged.density[:, 0]))
    panel, foot, distance = nearest_on_panels(panels, point)
    if distance <= ON_SURFACE * tracer.radius[panel]:
        up, field = _stronger_side(tracer, panels, panel, foot, normal)
        sign = 1.0 if field @ up > 0.0 else -1.0
        points, ends_on = tracer.follow(foot + LIFT * tracer.radius[panel] * up, sign)
        points[0] = foot
        starts_on = int(panels.conductor[panel])
    else:
        ahead, ends_on = tracer.follow(point, 1.0)
        behind, starts_on = tracer.follow(point, -1.0)
        points = np.concatenate([behind[:0:-1], ahead])
    step = np.linalg.norm(np.diff(points, axis=0), axis=1)
    keep = np.concatenate([[True], step > 0.0])
    return FieldLine(points[keep], np.concatenate([[0.0], np.cumsum(step)])[keep], starts_on, ends_on)


def _stronger_side(
    tracer: "_Tracer", panels: Panels, panel: int, foot: FloatArray, normal: ArrayLike | None
) -> tuple[FloatArray, FloatArray]:
    """Unit normal to the side on which a line leaves, and the field there."""
    up = panels.normals[panel]
    sides = up[None] * np.array([[1.0], [-1.0]])
    field = tracer.sums(foot + LIFT * tracer.radius[panel] * sides).field[:, :, 0]
    side = int(np.argmax(np.abs(field @ up))) if normal is None else int(np.asarray(normal) @ up < 0.0)
    if not np.any(field[side]):
        raise InputError(f"field line: there is no field at ({', '.join(f'{v:.4g}' for v in foot)}) m; start elsewhere")
    return sides[side], field[side]


class _Tracer:
    def __init__(self, panels: Panels, sums: PanelSum) -> None:
        self.panels, self.sums = panels, sums
        flat = panels.corners.reshape(-1, 3)
        self.middle = 0.5 * (flat.min(axis=0) + flat.max(axis=0))
        self.diagonal = float(np.linalg.norm(np.ptp(flat, axis=0)))
        self.radius = np.linalg.norm(panels.corners - panels.centroids[:, None, :], axis=2).max(axis=1)
        corners = panels.corners
        quads = panels.n_corners == 4
        self.triangles = np.concatenate([corners[:, [0, 1, 2]], corners[quads][:, [0, 2, 3]]])
        self.owner = np.concatenate([panels.conductor, panels.conductor[quads]])

    def follow(self, start: FloatArray, sign: float) -> tuple[FloatArray, int]:
        """Points from a start along (or against) the field, and the conductor met at the end."""

        def direction(_: float, x: FloatArray) -> FloatArray:
            field = self.sums(x[None]).field[0, :, 0]
            length = np.linalg.norm(field)
            return np.asarray(sign * field / length if length > 0.0 else 0.0 * field)

        if not np.any(direction(0.0, start)):
            raise InputError("field line: there is no field at the start; choose another one")
        points, x = [start], start
        largest = LARGEST_STEP * self.diagonal
        first = min(largest, NEAR_STEP * self._room(start))
        stepper = RK45(direction, 0.0, x, np.inf, rtol=RTOL, atol=RTOL * first, max_step=largest, first_step=first)
        for _ in range(MOST_STEPS):
            stepper.max_step = min(largest, NEAR_STEP * self._room(x))
            stepper.h_abs = min(stepper.h_abs, stepper.max_step)
            stepper.step()
            met = self._crossing(x, stepper.y)
            if met is not None:
                points.append(met[0])
                return np.array(points), met[1]
            x = stepper.y.copy()
            points.append(x)
            if stepper.status != "running" or np.linalg.norm(x - self.middle) > LEFT * self.diagonal:
                break
        return np.array(points), -1

    def _room(self, x: FloatArray) -> float:
        """Free way around a point: to the nearest panel, and a quarter of its radius."""
        away = np.linalg.norm(self.panels.centroids - x, axis=1) - self.radius
        return float(np.min(np.maximum(away, 0.0) + 0.25 * self.radius))

    def _crossing(self, one: FloatArray, other: FloatArray) -> tuple[FloatArray, int] | None:
        """Where a step first crosses a panel (Moeller and Trumbore, J. Graphics Tools 2 (1997) 21)."""
        a = self.triangles[:, 0]
        u, v, way = self.triangles[:, 1] - a, self.triangles[:, 2] - a, other - one
        p = np.cross(way, v)
        det = np.einsum("ij,ij->i", u, p)
        safe = np.where(det == 0.0, np.inf, det)
        s = one - a
        first = np.einsum("ij,ij->i", s, p) / safe
        q = np.cross(s, u)
        second, along = (q @ way) / safe, np.einsum("ij,ij->i", v, q) / safe
        hit = (first >= 0.0) & (second >= 0.0) & (first + second <= 1.0) & (along > 0.0) & (along <= 1.0)
        hit &= det != 0.0
        if not hit.any():
            return None
        rows = np.flatnonzero(hit)
        best = rows[np.argmin(along[rows])]
        return one + along[best] * way, int(self.owner[best])


def nearest_on_panels(panels: Panels, point: FloatArray) -> tuple[int, FloatArray, float]:
    """Panel nearest to a point, the nearest place on it and its distance.

    Parameters
    ----------
    panels : Panels
    point : (3,) float, m

    Returns
    -------
    panel : int
    foot : (3,) float, m
    distance : float, m
    """
    corners, normals = panels.corners, panels.normals
    height = np.einsum("ij,ij->i", point - corners[:, 0], normals)
    foot = point - height[:, None] * normals
    sides = np.roll(corners, -1, axis=1) - corners
    from_corner = foot[:, None, :] - corners
    across = np.einsum("ikj,ikj->ik", np.cross(sides, from_corner), np.broadcast_to(normals[:, None, :], sides.shape))
    inside = (across >= 0.0).all(axis=1)
    length2 = np.maximum(np.einsum("ikj,ikj->ik", sides, sides), 1e-300)
    along = np.clip(np.einsum("ikj,ikj->ik", point - corners, sides) / length2, 0.0, 1.0)
    on_side = corners + along[..., None] * sides
    gap = np.linalg.norm(point - on_side, axis=2)
    nearest = np.argmin(gap, axis=1)
    rows = np.arange(len(panels))
    distance = np.where(inside, np.abs(height), gap[rows, nearest])
    best = int(np.argmin(distance))
    return best, (foot[best] if inside[best] else on_side[best, nearest[best]]), float(distance[best])
