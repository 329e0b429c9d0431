"""A made-up solution, for tests of what surrounds the solver: right in shape and sign, not in value."""

import numpy as np

from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.panels import Panels
from daraf.bem.regions import find_regions
from daraf.bem.solution import CapacitanceSolution, Notice, Pass
from daraf.bem.surface import Surface


def sample_solution(surface, *, relative_permittivity=1.0, accuracy=0.01, reached=True, interrupted=False, warnings=()):
    """Each conductor taken as a sphere of its own extent at its own middle."""
    n = surface.n_conductors
    corners = surface.vertices[surface.triangles][:, [0, 1, 2, 2]]
    panel_conductor = surface.body_conductor[surface.triangle_body]
    middle = np.array([corners[panel_conductor == i].reshape(-1, 3).mean(axis=0) for i in range(n)])
    radius = np.array([np.ptp(corners[panel_conductor == i].reshape(-1, 3), axis=0).max() / 2 for i in range(n)])
    distance = np.linalg.norm(middle[:, None] - middle, axis=2) + np.diag(radius)
    elastance = 1.0 / (FOUR_PI_EPSILON_0 * relative_permittivity * distance)
    maxwell = np.linalg.inv(elastance)
    maxwell = 0.5 * (maxwell + maxwell.T)
    own = np.sqrt(np.outer(np.diag(maxwell), np.diag(maxwell)))
    limits = 0.3 * accuracy * (0.9 * np.abs(maxwell) + 1e-4 * own)
    panels = Panels(
        corners=corners,
        n_corners=np.full(len(corners), 3),
        body=surface.triangle_body,
        conductor=panel_conductor,
        region=find_regions(surface)[0].triangle_region,
    )
    area = np.array([panels.areas[panel_conductor == j].sum() for j in range(n)])
    return CapacitanceSolution(
        conductor_names=surface.conductor_names,
        maxwell=maxwell,
        maxwell_uncertainty=limits,
        to_infinity=maxwell.sum(axis=1),
        to_infinity_uncertainty=limits.sum(axis=1),
        budget={"discretisation": 0.9 * limits, "facets": 0.1 * limits},
        accuracy=accuracy,
        relative_permittivity=relative_permittivity,
        reached=reached,
        interrupted=interrupted,
        panels=panels,
        densities=np.ascontiguousarray((maxwell / area)[:, panel_conductor]),
        passes=[Pass(len(panels), maxwell, 0.5 * limits, limits, 0.25)],
        method="dense",
        iterations=0,
        seconds={"assembly": 0.25, "solution": 0.125},
        peak_memory_bytes=123_000_000,
        warnings=[Notice(code, text) for code, text in warnings],
    )


def boxes_surface(n):
    """n boxes of growing size in a row."""
    corner = np.array([[x, y, z] for x in (0, 1) for y in (0, 1) for z in (0, 1)], dtype=float)
    vertices = np.concatenate([(corner * (1 + 0.1 * k) + [3 * k, 0, 0]) * 1e-3 for k in range(n)])
    triangles = np.concatenate([BOX_FACES + 8 * k for k in range(n)])
    names = tuple(f"plate {k + 1}" for k in range(n))
    return Surface(vertices, triangles, np.repeat(np.arange(n), 12), np.arange(n), names, names)


#: Triangles of the box whose corner number is 4 x + 2 y + z, seen from outside counter-clockwise.
BOX_FACES = np.array(
    [
        [0, 1, 3], [0, 3, 2], [4, 6, 7], [4, 7, 5], [0, 4, 5], [0, 5, 1],
        [2, 3, 7], [2, 7, 6], [0, 2, 6], [0, 6, 4], [1, 5, 7], [1, 7, 3],
    ]
)  # fmt: skip


def ascii_stl(name, shift=(0.0, 0.0, 0.0), size=1.0):
    """Text of a box as one named solid."""
    corner = np.array([[x, y, z] for x in (0, 1) for y in (0, 1) for z in (0, 1)], dtype=float) * size + shift
    lines = [f"solid {name}"]
    for face in BOX_FACES:
        lines += ["facet normal 0 0 0", "outer loop"]
        lines += [f"vertex {p[0]:.9g} {p[1]:.9g} {p[2]:.9g}" for p in corner[face]]
        lines += ["endloop", "endfacet"]
    return "\n".join([*lines, f"endsolid {name}", ""])
