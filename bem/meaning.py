"""What a solved surface means: which side of a body is metal, and how far its facets were moved.

Enough to evaluate fields from the solved panels alone, without the drawing they came from.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .creases import Creases, find_creases
from .facets import facet_meaning, find_facets, greatest_turn
from .panels import Panels
from .regions import find_regions
from .sides import turns_around
from .surface import Surface

__all__ = ["SurfaceMeaning", "body_fill", "surface_meaning"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class SurfaceMeaning:
    """What panels stand for.

    Attributes
    ----------
    facet_offset : (n_panels,) float, m
        How far each panel was moved outward onto the round surface that its facet stands for.
    fill : (n_bodies,) int
        1 where the inside of a body is metal, -1 where it is a cavity in metal, 0 of sheets and of thin closed shells.
    """

    facet_offset: FloatArray
    fill: IntArray


def surface_meaning(surface: Surface, panels: Panels, facets: str = "auto") -> SurfaceMeaning:
    """Tell what the panels of a solve stand for.

    Parameters
    ----------
    surface : Surface
        That was solved.
    panels : Panels
    facets : {"auto", "round", "as drawn"}

    Returns
    -------
    SurfaceMeaning
    """
    meaning = facet_meaning(facets)
    regions, _ = find_regions(surface)
    creases = find_creases(surface, regions, greatest_turn=greatest_turn(meaning))
    offset = np.zeros(len(panels))
    if meaning != "as drawn":
        offset = np.asarray(find_facets(surface, regions, creases).offset[panels.region])
    return SurfaceMeaning(offset, body_fill(surface, creases))


def body_fill(surface: Surface, creases: Creases) -> IntArray:
    """Which closed bodies are solid, and which bound a cavity in a solid one.

    Parameters
    ----------
    surface : Surface
    creases : Creases

    Returns
    -------
    (n_bodies,) int
        As in `SurfaceMeaning`. A closed body with another one in its inside, and no wall of a cavity round that one,
        is a thin shell.
    """
    n = surface.n_bodies
    rims = np.flatnonzero(creases.rim)
    closed = np.ones(n, bool)
    closed[surface.triangle_body[creases.edges.triangles[rims].max(axis=1)]] = False
    corners = [surface.vertices[surface.triangles[surface.triangle_body == b]] for b in range(n)]
    first = np.array([own[0, 0] for own in corners])
    outward = np.array([_volume(own) > 0.0 for own in corners])
    inside = np.zeros((n, n), bool)  # [a, b]: body b lies in the inside of a
    for a in np.flatnonzero(closed):
        low, high = corners[a].min(axis=(0, 1)), corners[a].max(axis=(0, 1))
        near = ((first > low) & (first < high)).all(axis=1)
        near[a] = False
        for b in np.flatnonzero(near):
            inside[a, b] = abs(turns_around(corners[a] - first[b])) > 0.5
    fill = np.zeros(n, np.int64)
    for a in np.flatnonzero(closed & outward):
        held = np.flatnonzero(inside[a])
        walls = held[(closed & ~outward)[held] & (surface.body_conductor[held] == surface.body_conductor[a])]
        covered = inside[walls].any(axis=0) if len(walls) else np.zeros(n, bool)
        covered[walls] = True
        if covered[held].all():
            fill[a] = 1
            fill[walls] = -1
    return fill


def _volume(corners: FloatArray) -> float:
    own = corners - corners.reshape(-1, 3).mean(axis=0)
    return float(np.einsum("ij,ij->", own[:, 0], np.cross(own[:, 1], own[:, 2])))
