"""Mirror planes and a dielectric half-space by images: further source panels with a factor each.

An electric wall (earthed plane) mirrors a charge with the opposite sign, a magnetic wall (symmetry, insulating
surface) with the same sign; several orthogonal planes mirror each other's images, up to eight in all. A half-space of
permittivity e2 under one of e1 acts on sources and targets above by the image (e1 - e2)/(e1 + e2), and across the
plane by the factor 2/(e1 + e2) in place of 1/e (W. R. Smythe, Static and Dynamic Electricity, section 5.05, from
memory). All of this is exact.

With a half-space the unknown is the *free* charge: conductors alone, without dielectric bodies.
"""

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import InputError
from .panels import Panels

__all__ = ["HalfSpace", "Images", "MirrorPlane", "mirrored"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Corners this close to a plane, per extent of all panels, lie in it.
_AT_PLANE = 1e-7
#: Facets moved onto a smooth surface may poke through a plane by this much, per extent.
_ACROSS = 1e-3
#: Cosines of the angle between two planes' normals below this are orthogonal.
_ORTHOGONAL = 1e-9


def mirrored(points: FloatArray, point: FloatArray, normal: FloatArray) -> FloatArray:
    """Points reflected in a plane, (..., 3) m."""
    return np.asarray(points - 2.0 * ((points - point) @ normal)[..., None] * normal)


def _plane(point: ArrayLike, normal: ArrayLike) -> tuple[FloatArray, FloatArray]:
    place, vector = np.asarray(point, dtype=np.float64), np.asarray(normal, dtype=np.float64)
    size = np.linalg.norm(vector)
    if place.shape != (3,) or vector.shape != (3,) or not np.isfinite(place).all() or not 0.0 < size < np.inf:
        raise InputError("plane: a point and a normal of three finite numbers each are needed, the normal not zero")
    return place, vector / size


@dataclass(frozen=True, eq=False)
class MirrorPlane:
    """A plane that mirrors what lies on one side of it.

    Parameters
    ----------
    point, normal : (3,) float, m
    electric : bool
        An earthed plane; otherwise a magnetic wall: no field through it.
    """

    point: FloatArray
    normal: FloatArray
    electric: bool

    def __post_init__(self) -> None:
        place, vector = _plane(self.point, self.normal)
        object.__setattr__(self, "point", place)
        object.__setattr__(self, "normal", vector)


@dataclass(frozen=True, eq=False)
class HalfSpace:
    """A plane between two media that reach to infinity.

    Parameters
    ----------
    point, normal : (3,) float, m
        The normal points into the medium `above`.
    above, below : float
        Relative permittivities.
    """

    point: FloatArray
    normal: FloatArray
    above: float
    below: float

    def __post_init__(self) -> None:
        place, vector = _plane(self.point, self.normal)
        object.__setattr__(self, "point", place)
        object.__setattr__(self, "normal", vector)
        if not (1.0 <= self.above < np.inf and 1.0 <= self.below < np.inf):
            raise InputError("half-space: both relative permittivities must be finite and at least 1")

    def factors(self) -> FloatArray:
        """Factors of 1/r, ``[direct or image, target's side, source's side]``; sides: above, below, in the plane."""
        up, down = self.above, self.below
        across = 2.0 / (up + down)
        reflected = (up - down) / (up + down)
        direct = np.full((3, 3), across)
        direct[0, 0], direct[1, 1] = 1.0 / up, 1.0 / down
        image = np.zeros((3, 3))
        image[0, 0], image[1, 1] = reflected / up, -reflected / down
        return np.stack([direct, image])


@dataclass(frozen=True, eq=False)
class Images:
    """Up to three orthogonal mirror planes, and at most one half-space orthogonal to them.

    Parameters
    ----------
    planes : tuple of MirrorPlane
    half_space : HalfSpace, optional

    Raises
    ------
    InputError
        If planes are not orthogonal, or more than three.
    """

    planes: tuple[MirrorPlane, ...] = field(default=())
    half_space: HalfSpace | None = None

    def __post_init__(self) -> None:
        normals = [plane.normal for plane in self.planes]
        if self.half_space is not None:
            normals.append(self.half_space.normal)
        if len(normals) > 3:
            raise InputError(f"planes: at most three are possible in all, got {len(normals)}")
        for i, one in enumerate(normals):
            for two in normals[:i]:
                if abs(float(one @ two)) > _ORTHOGONAL:
                    angle = np.degrees(np.arccos(min(abs(float(one @ two)), 1.0)))
                    raise InputError(f"planes must be orthogonal to each other, these two meet at {angle:.4g} degrees")

    @cached_property
    def n_images(self) -> int:
        """Sources in all for each panel, itself included."""
        return int(2 ** (len(self.planes) + (self.half_space is not None)))

    @property
    def any_electric(self) -> bool:
        """Whether a plane is earthed."""
        return any(plane.electric for plane in self.planes)

    def place(self, panels: Panels, names: tuple[str, ...] = ()) -> "PlacedImages":
        """Images of panels.

        Parameters
        ----------
        panels : Panels
        names : tuple of str, optional
            Of the bodies, for messages.

        Raises
        ------
        InputError
            If a body crosses a plane, or touches an earthed one.
        """
        for plane in self.planes:
            self._one_side(panels, plane, names)
        copies, signs = self.copies(panels.corners, panels.n_corners)
        side = np.zeros(len(panels), dtype=np.int64)
        factors = np.array(signs)[:, None, None]
        if self.half_space is not None:
            half = self.half_space
            side = self._sides(panels, names)
            copies += [_turned_round(mirrored(c, half.point, half.normal), panels.n_corners) for c in copies]
            table = half.factors()
            factors = np.concatenate([factors * table[0], factors * table[1]])
        return PlacedImages(np.concatenate(copies), factors, side)

    def copies(self, corners: FloatArray, n_corners: IntArray) -> tuple[list[FloatArray], list[float]]:
        """Corners (n, 4, 3) of all mirror images, normals mirrored too, and the sign of each; the originals first."""
        copies, signs = [corners], [1.0]
        for plane in self.planes:
            sign = -1.0 if plane.electric else 1.0
            copies += [_turned_round(mirrored(c, plane.point, plane.normal), n_corners) for c in copies]
            signs += [sign * s for s in signs]
        return copies, signs

    def _one_side(self, panels: Panels, plane: MirrorPlane, names: tuple[str, ...]) -> None:
        height = (panels.corners - plane.point) @ plane.normal
        size = float(np.ptp(panels.corners.reshape(-1, 3), axis=0).max())
        up, down = (height > _ACROSS * size).any(axis=1), (height < -_ACROSS * size).any(axis=1)
        if up.any() and down.any():
            few = up if np.count_nonzero(up) < np.count_nonzero(down) else down
            where = panels.centroids[np.flatnonzero(few)[0]]
            body = _named(names, int(panels.body[np.flatnonzero(few)[0]]))
            raise InputError(
                f"{body} reaches through a mirror plane at ({where[0]:.4g}, {where[1]:.4g}, {where[2]:.4g}) m: model "
                "one side only, cut at the plane"
            )
        if plane.electric:
            flat = (np.abs(height) < _AT_PLANE * size).all(axis=1)
            if flat.any():
                body = _named(names, int(panels.body[np.flatnonzero(flat)[0]]))
                raise InputError(f"{body} lies in an earthed plane: it is part of the earth, leave it out")

    def _sides(self, panels: Panels, names: tuple[str, ...]) -> IntArray:
        """0 above, 1 below, 2 in the plane of the half-space."""
        plane = self.half_space
        assert plane is not None
        height = (panels.corners - plane.point) @ plane.normal
        size = float(np.ptp(panels.corners.reshape(-1, 3), axis=0).max())
        low, high = height.min(axis=1), height.max(axis=1)
        crossing = (low < -_ACROSS * size) & (high > _ACROSS * size)
        if crossing.any():
            body = _named(names, int(panels.body[np.flatnonzero(crossing)[0]]))
            raise InputError(f"{body} reaches through the plane of the half-space uncut: cut its surface at the plane")
        flat = (low > -_AT_PLANE * size) & (high < _AT_PLANE * size)
        return np.asarray(np.where(flat, 2, np.where(high + low > 0.0, 0, 1)), dtype=np.int64)


def _named(names: tuple[str, ...], body: int) -> str:
    return f"body {names[body]!r}" if body < len(names) else f"body {body + 1}"


def _turned_round(corners: FloatArray, n_corners: IntArray) -> FloatArray:
    """Corners the other way round, so that the normal of a mirrored panel is the mirrored normal."""
    order = np.where((n_corners == 4)[:, None], [0, 3, 2, 1], [0, 2, 1, 1])
    return np.take_along_axis(corners, order[:, :, None], axis=1)


@dataclass(frozen=True, eq=False)
class PlacedImages:
    """Images of the panels of one pass.

    Attributes
    ----------
    corners : (n_images n_panels, 4, 3) float, m
        The panels themselves first.
    factors : (n_images, 1 or 3, 1 or 3) float
        Of each image, by the sides of target and source.
    side : (n_panels,) int
        Side of each panel, 0 where there is but one.
    """

    corners: FloatArray
    factors: FloatArray
    side: IntArray

    @property
    def n_sides(self) -> int:
        """Sides that a target may be on."""
        return int(self.factors.shape[1])

    @property
    def direct(self) -> FloatArray:
        """Factor of every panel's own charge on itself, without images, (n_panels,)."""
        side = self.side
        return np.asarray(self.factors[0, side, side])

    def of_source(self, target_side: int) -> FloatArray:
        """Factor of every image as seen from one side, (n_images n_panels,)."""
        return np.asarray(self.factors[:, target_side][:, self.side].reshape(-1))

    def folded(self, rows: FloatArray, target_side: IntArray) -> FloatArray:
        """Sum over the images of each panel, (m, n_panels).

        Parameters
        ----------
        rows : (m, n_images n_panels) float
        target_side : (m,) int
        """
        n = len(self.side)
        total = np.zeros((len(rows), n))
        for image, factor in enumerate(self.factors):
            total += factor[target_side][:, self.side] * rows[:, image * n : (image + 1) * n]
        return total
