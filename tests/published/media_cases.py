"""Exact solutions with dielectrics, as surfaces and media: for coverage and tests. Lengths in m."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from daraf.bem import Surface
from daraf.bem.media import METAL, Media
from published import exact as X  # noqa: N812
from published import shapes as S  # noqa: N812
from published.shapes import Mesh

__all__ = ["MEDIA_CASES", "MediaCase", "half_filled_spheres", "layered_spheres", "media_case_named", "split_faces"]


@dataclass(frozen=True, eq=False)
class MediaCase:
    """Conductors among dielectrics with a known answer.

    Attributes
    ----------
    name : str
    make : callable
        Surface and media.
    exact : complex, float or array
        Maxwell matrix over 4 pi epsilon_0, m; nan where it is not known.
    source : str
    """

    name: str
    make: Callable[[], tuple[Surface, Media]]
    exact: ArrayLike
    source: str

    def reference(self) -> NDArray[np.generic]:
        """The matrix, (n, n) m."""
        value = np.asarray(self.exact)
        return value if value.ndim == 2 else value.reshape(1, 1)


def layered_spheres(radii: list[float], ratios: list[complex], levels: int, last: int = 0) -> tuple[Surface, Media]:
    """Sphere of radius radii[0] under layers, layer k of ratios[k] out to radii[k + 1]; air beyond.

    With `last` the outermost sphere is the inner face of a second conductor. A sheet has two sides, so that its own
    entry holds what lies beyond as well.
    """
    meshes: list[Mesh] = [S.icosphere(r, levels) for r in radii]
    if last:
        # conductors come first, and the metal of the shell lies outside: its normal points inward
        ordered = [meshes[0], S.flipped(meshes[-1]), *meshes[1:-1]]
        outside = [0, len(ratios) - 1, *range(1, len(ratios))]
        inside = [METAL, METAL, *range(len(ratios) - 1)]
        return S.surface(ordered), Media(np.array(ratios), np.array(outside), np.array(inside), 2)
    outside = [1, *range(2, len(ratios) + 1), 0]
    inside = [METAL, *range(1, len(ratios) + 1)]
    return S.surface(meshes), Media(np.array([1.0, *ratios]), np.array(outside), np.array(inside), 1)


def coated(inner: float, outer: float, ratio: complex) -> complex:
    """Capacitance of a coated sphere in air, m."""
    return 1.0 / ((1.0 / inner - 1.0 / outer) / ratio + 1.0 / outer)


def coated_ellipsoid(half_axes: tuple[float, float, float], growth: float, ratio: float) -> tuple[Surface, Media]:
    """Ellipsoid under a confocal coat whose squared half axes are larger by `growth`."""
    grown = tuple(float(np.sqrt(a * a + growth)) for a in half_axes)
    surface = S.surface([S.ellipsoid(half_axes, 3), S.ellipsoid(grown, 3)])
    return surface, Media(np.array([1.0, ratio]), np.array([1, 0]), np.array([METAL, 1]), 1)


def split_faces(mesh: Mesh, chosen: Callable[[NDArray[np.float64]], bool]) -> tuple[Mesh, Mesh]:
    """The triangles of a mesh whose unit normals or centroids `chosen` picks, and the others."""
    vertices, triangles = mesh
    a, b, c = (vertices[triangles[:, k]] for k in range(3))
    normals = np.cross(b - a, c - a)
    normals /= np.linalg.norm(normals, axis=1)[:, None]
    pick = np.array([chosen(n) for n in np.hstack([normals, (a + b + c) / 3.0])])
    return _part(vertices, triangles[pick]), _part(vertices, triangles[~pick])


def _part(vertices: NDArray[np.float64], triangles: NDArray[np.int64]) -> Mesh:
    used, place = np.unique(triangles, return_inverse=True)
    return vertices[used], place.reshape(-1, 3).astype(np.int64)


def half_filled_spheres(inner: float, outer: float, ratio: float, sides: int = 32) -> tuple[Surface, Media]:
    """Spherical capacitor whose upper half is filled: the field is radial, as if both halves stood alone.

    The interface is a flat ring that touches both conductors.
    """
    low_in, up_in = _halves(inner, sides)
    low_out, up_out = _halves(outer, sides)
    angle = 2.0 * np.pi * np.arange(sides) / sides
    circle = np.column_stack([np.cos(angle), np.sin(angle), np.zeros(sides)])
    k = np.arange(sides)
    after = (k + 1) % sides
    strip = np.concatenate([np.column_stack([k, sides + k, sides + after]), np.column_stack([k, sides + after, after])])
    ring = (np.concatenate([inner * circle, outer * circle]), strip)
    bodies: list[Mesh | list[Mesh]] = [[low_in, up_in], [S.flipped(low_out), S.flipped(up_out)], ring]
    media = Media(
        np.array([1.0, ratio]), np.array([0, 1, 0, 1, 1]), np.array([METAL] * 4 + [0]), 2, np.array([0, 0, 1, 1, 2])
    )
    return S.surface(bodies), media


def _halves(radius: float, sides: int) -> tuple[Mesh, Mesh]:
    return split_faces(S.uv_sphere(radius, sides, sides // 2), lambda n: bool(n[5] < 0.0))


def _in_series(half_axes: tuple[float, float, float], growth: float, ratio: float) -> float:
    bare = 1.0 / X.ellipsoid(*half_axes)
    beyond = 1.0 / X.ellipsoid(*(float(np.sqrt(a * a + growth)) for a in half_axes))
    return 1.0 / ((bare - beyond) / ratio + beyond)


_SERIES = "elementary: radial field"
_CONFOCAL = "confocal shells are equipotential: NIST DLMF 19.33(ii), in series"

MEDIA_CASES = [
    *(
        MediaCase(
            f"coated-{ratio:g}", lambda r=ratio: layered_spheres([1.0, 1.5], [r], 2), coated(1.0, 1.5, ratio), _SERIES
        )
        for ratio in (2.0, 7.0, 80.0, 1e4)
    ),
    *(
        MediaCase(
            f"thin-coat-{ratio:g}",
            lambda r=ratio: layered_spheres([1.0, 1.05], [r], 2),
            coated(1.0, 1.05, ratio),
            _SERIES,
        )
        for ratio in (4.0, 80.0, 1e4)
    ),
    MediaCase("coated-coarse", lambda: layered_spheres([1.0, 1.5], [4.0], 1), coated(1.0, 1.5, 4.0), _SERIES),
    MediaCase("coat-1-in-100", lambda: layered_spheres([1.0, 1.01], [4.0], 3), coated(1.0, 1.01, 4.0), _SERIES),
    MediaCase(
        "two-coats",
        lambda: layered_spheres([1.0, 1.3, 2.0], [5.0, 2.5], 2),
        1.0 / ((1.0 - 1.0 / 1.3) / 5.0 + (1.0 / 1.3 - 0.5) / 2.5 + 0.5),
        _SERIES,
    ),
    MediaCase(
        "two-layer-capacitor",
        lambda: layered_spheres([1.0, 1.5, 2.0], [2.0, 5.0], 2, last=1),
        [[5.0, -5.0], [-5.0, np.nan]],
        _SERIES,
    ),
    MediaCase(
        "half-filled",
        lambda: half_filled_spheres(1.0, 2.0, 4.0),
        [[5.0, -5.0], [-5.0, np.nan]],
        "elementary: the radial field satisfies all conditions, C = (e1 + e2)/2 ab/(b - a)",
    ),
    MediaCase(
        "coated-ellipsoid",
        lambda: coated_ellipsoid((1.0, 0.7, 0.4), 0.3, 3.7),
        _in_series((1.0, 0.7, 0.4), 0.3, 3.7),
        _CONFOCAL,
    ),
    MediaCase(
        "lossy-coat",
        lambda: layered_spheres([1.0, 1.5], [4.0 - 3.0j], 2),
        coated(1.0, 1.5, 4.0 - 3.0j),
        _SERIES,
    ),
]


def media_case_named(name: str) -> MediaCase:
    """Case by its name."""
    return {case.name: case for case in MEDIA_CASES}[name]
