"""Flat faces of one body, found the way the panels will be."""

import numpy as np

from daraf.bem.regions import Regions, find_regions
from daraf.bem.surface import Surface

from .bodies import Body

__all__ = ["flat_faces", "surface_of"]


def surface_of(body: Body) -> Surface:
    """The body alone, as the panels take it."""
    return Surface(body.vertices, body.triangles, np.zeros(len(body.triangles), np.int64), np.zeros(1, np.int64))


def flat_faces(body: Body) -> Regions:
    """Flat faces of a body: connected triangles in one plane."""
    return find_regions(surface_of(body))[0]
