"""One door to the mesh makers: bodies as a CAD exporter would tessellate them, in metres.

Every maker returns a `Mesh`, the pair (vertices (n, 3) float m, triangles (m, 3) int); triangles run
counter-clockwise seen from outside, flat open sheets seen from +z. Vertices lie on the true surface, so
that round bodies are inscribed polyhedra: compare them with the round value only at a matching tolerance.
"""

from published.shapes_flat import (
    block,
    cube,
    drilled_plate,
    drilled_slab,
    l_plate,
    plate,
    regular_solid,
)
from published.shapes_placing import (
    Mesh,
    area,
    extent,
    flipped,
    is_closed,
    joined,
    moved,
    scaled,
    surface,
    turned,
    volume,
)
from published.shapes_round import (
    bowl,
    capsule,
    cylinder,
    disc,
    ellipsoid,
    hemisphere,
    icosphere,
    lathe,
    spheroid,
    torus,
    tube,
    uv_sphere,
)

__all__ = [
    "Mesh",
    "area",
    "block",
    "bowl",
    "capsule",
    "cube",
    "cylinder",
    "disc",
    "drilled_plate",
    "drilled_slab",
    "ellipsoid",
    "extent",
    "flipped",
    "hemisphere",
    "icosphere",
    "is_closed",
    "joined",
    "l_plate",
    "lathe",
    "moved",
    "plate",
    "regular_solid",
    "scaled",
    "spheroid",
    "surface",
    "torus",
    "tube",
    "turned",
    "uv_sphere",
    "volume",
]
