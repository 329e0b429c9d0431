"""Which surfaces carry charge on both sides."""

import numpy as np
from numpy.typing import NDArray

from .creases import Creases
from .surface import Surface

__all__ = ["turns_around", "two_sided_bodies"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


def two_sided_bodies(surface: Surface, creases: Creases) -> BoolArray:
    """Bodies both sides of whose surface may carry charge: with a rim, turned inside out, or with a body inside.

    Parameters
    ----------
    surface : Surface
    creases : Creases

    Returns
    -------
    (n_bodies,) bool
    """
    rims = np.flatnonzero(creases.rim)
    two_sided = np.zeros(surface.n_bodies, bool)
    two_sided[surface.triangle_body[creases.edges.triangles[rims].max(axis=1)]] = True
    corners = surface.vertices[surface.triangles]
    first = np.array(
        [surface.vertices[surface.triangles[surface.triangle_body == b][0, 0]] for b in range(surface.n_bodies)]
    )
    for body in np.flatnonzero(~two_sided):
        own = corners[surface.triangle_body == body]
        own = own - own.reshape(-1, 3).mean(axis=0)
        volume = np.einsum("ij,ij->", own[:, 0], np.cross(own[:, 1], own[:, 2]))
        others = np.flatnonzero(np.arange(surface.n_bodies) != body)
        low, high = (
            corners[surface.triangle_body == body].min(axis=(0, 1)),
            corners[surface.triangle_body == body].max(axis=(0, 1)),
        )
        near = others[((first[others] > low) & (first[others] < high)).all(axis=1)]
        two_sided[body] = volume < 0 or any(
            abs(turns_around(corners[surface.triangle_body == body] - first[other])) > 0.5 for other in near
        )
    return two_sided


def turns_around(corners: FloatArray) -> float:
    """How often a closed mesh wraps around the origin (van Oosterom and Strackee 1983, summed over 4 pi).

    Parameters
    ----------
    corners : (n_triangles, 3, 3) float, m

    Returns
    -------
    float
    """
    a, b, c = corners[:, 0], corners[:, 1], corners[:, 2]
    ra, rb, rc = (np.linalg.norm(v, axis=1) for v in (a, b, c))
    numerator = np.einsum("ij,ij->i", a, np.cross(b, c))
    dot = (np.einsum("ij,ij->i", p, q) for p, q in ((a, b), (b, c), (c, a)))
    ab, bc, ca = dot
    return float(np.sum(2.0 * np.arctan2(numerator, ra * rb * rc + ab * rc + bc * ra + ca * rb)) / (4.0 * np.pi))
