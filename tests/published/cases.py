"""The exact-solution set: conductors as CAD meshes whose capacitances are known, for coverage and tests.

Round bodies are inscribed polyhedra; the value is that of the true round shape, so that the facets' part of the
uncertainty is put to the test as well. All lengths in m.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import cos, pi, sin

import numpy as np
from numpy.typing import ArrayLike, NDArray

from daraf.bem import CapacitanceSolution, Surface, eliminate_floating, excite
from daraf.bem.constants import FOUR_PI_EPSILON_0
from published import exact as X  # noqa: N812
from published import shapes as S  # noqa: N812
from published.exact_chains import confocal_ellipsoids, nested_shells, sphere_chain
from published.exact_rectangles import TILT, rectangles
from published.shapes import Mesh

__all__ = ["CASES", "Case", "case_named", "entries"]

FloatArray = NDArray[np.float64]
Observation = tuple[FloatArray, FloatArray]


def entries(solution: CapacitanceSolution) -> Observation:
    """The Maxwell matrix and its uncertainty, F."""
    return solution.maxwell, solution.maxwell_uncertainty


def _floating(*conductors: int) -> Callable[[CapacitanceSolution], Observation]:
    """The Maxwell matrix left when these conductors float without charge, F."""

    def observe(solution: CapacitanceSolution) -> Observation:
        free = np.isin(np.arange(len(solution.maxwell)), conductors)
        return eliminate_floating(solution.maxwell, solution.maxwell_uncertainty, free)

    return observe


def _charges(held: Sequence[bool], values: Sequence[float]) -> Callable[[CapacitanceSolution], Observation]:
    """Charges at given potentials (where held) and charges, C."""

    def observe(solution: CapacitanceSolution) -> Observation:
        state = excite(solution.maxwell, solution.maxwell_uncertainty, held, values)
        return state.charge, state.charge_uncertainty

    return observe


@dataclass(frozen=True, eq=False)
class Case:
    """Conductors with a known answer.

    Attributes
    ----------
    name : str
    surface : callable
        Makes the surface, m.
    exact : callable
        Gives the answer over 4 pi epsilon_0, m; nan where it is not known. A single number for one conductor.
    source : str
        Of the answer.
    observe : callable
        From the solution to what `exact` gives, and its uncertainty, F or C.
    want : sequence of (int, int), optional
        Entries whose accuracy is asked; all unless given. Uncertainties of all are judged.
    """

    name: str
    surface: Callable[[], Surface]
    exact: Callable[[], ArrayLike]
    source: str
    observe: Callable[[CapacitanceSolution], Observation] = entries
    want: tuple[tuple[int, int], ...] | None = None

    def reference(self) -> FloatArray:
        """What `observe` should give, F or C: (n, n), or (n,) charges."""
        return FOUR_PI_EPSILON_0 * np.asarray(self.exact(), dtype=np.float64).reshape(self._shape())

    def _shape(self) -> tuple[int, ...]:
        shape = np.shape(self.exact())
        return shape or (1, 1)


def case_named(name: str) -> Case:
    """Case by its name."""
    return {case.name: case for case in CASES}[name]


def _one(*meshes: Mesh) -> Surface:
    """Surface of one conductor made of these bodies."""
    return S.surface([list(meshes)])


def _each(*meshes: Mesh) -> Surface:
    """Surface with one conductor per body."""
    return S.surface(list(meshes))


def _row(radii: Sequence[float], positions: Sequence[float], levels: int) -> Surface:
    """Spheres along a skew line, so that no axis of the mesh is special."""
    line = np.array([2.0, 3.0, 6.0]) / 7.0
    return _each(*(S.moved(S.icosphere(r, levels), *(p * line)) for r, p in zip(radii, positions, strict=True)))


def _pair(mesh: Mesh, distance: float) -> Surface:
    """Two alike, one `distance` above the other."""
    return _each(mesh, S.moved(mesh, z=distance))


def _caps(half_angle: float, sides: int, rings: int) -> Mesh:
    """Two caps of unit spheres over one rim, bulging away from each other: a lens or two balls grown together."""
    t = np.linspace(0.0, half_angle, rings + 1)[1:-1].tolist()
    low = [(0.0, cos(half_angle) - 1.0)] + [(sin(a), cos(half_angle) - cos(a)) for a in t]
    high = [(r, -z) for r, z in reversed(low)]
    return S.lathe([*low, (sin(half_angle), 0.0), *high], sides)


def _close_balls() -> Surface:
    """Two unit spheres 0.02 apart, their rings dense where they face each other."""
    angle = pi * (np.linspace(0.0, 1.0, 25)[1:-1] ** 2)
    low = [(0.0, -1.0), *((sin(a), -cos(a)) for a in angle.tolist()), (0.0, 1.0)]
    high = [(r, -z) for r, z in reversed(low)]
    return _each(S.moved(S.lathe(low, 24), z=2.02), S.lathe(high, 24))


_SPHERES = "Maxwell, Treatise (1873) art. 173"
_TABLE = "computed, see exact_tables.py"
_KELVIN = "Kelvin, Reprint of Papers on Electrostatics and Magnetism (1872)"
_LOVE = "Love, Quart. J. Mech. Appl. Math. 2 (1949) 428"
_CAPS = "Macdonald, Proc. London Math. Soc. 26 (1895) 156"
_RF = "NIST Digital Library of Mathematical Functions, section 19.33(ii)"
_HICKS = "Hicks, Phil. Trans. R. Soc. 172 (1881) 609"
_ROW = "Hobson, Spherical and Ellipsoidal Harmonics (1931) art. 89"
_SHELLS = "Maxwell, Treatise (1873) art. 125"
_NULL = "a floating sheet in the plane of zero potential changes nothing"

_SMOOTH = [
    Case("sphere-80", lambda: _one(S.icosphere(1.0, 1)), lambda: 1.0, "elementary"),
    Case("sphere-320", lambda: _one(S.icosphere(1.0, 2)), lambda: 1.0, "elementary"),
    Case("sphere-1280", lambda: _one(S.icosphere(1.0, 3)), lambda: 1.0, "elementary"),
    Case("sphere-poles", lambda: _one(S.uv_sphere(1.0, 24, 12)), lambda: 1.0, "elementary"),
    Case("sphere-micrometre", lambda: _one(S.moved(S.uv_sphere(1e-6, 16, 8), 1e-3)), lambda: 1e-6, "elementary"),
    Case("prolate-2", lambda: _one(S.spheroid(2.0, 1.0, 3)), lambda: X.prolate_spheroid(2, 1), _RF),
    Case("prolate-5", lambda: _one(S.spheroid(5.0, 1.0, 3)), lambda: X.prolate_spheroid(5, 1), _RF),
    Case("oblate-2", lambda: _one(S.spheroid(1.0, 2.0, 3)), lambda: X.oblate_spheroid(2, 1), _RF),
    Case("ellipsoid-321", lambda: _one(S.ellipsoid((3.0, 2.0, 1.0), 3)), lambda: X.ellipsoid(3, 2, 1), _RF),
    Case("ellipsoid-coarse", lambda: _one(S.ellipsoid((1.0, 0.7, 0.4), 2)), lambda: X.ellipsoid(1, 0.7, 0.4), _RF),
    Case("torus-2", lambda: _one(S.torus(2.0, 1.0, 32, 16)), lambda: X.torus(2, 1), _HICKS),
    Case("torus-5", lambda: _one(S.torus(5.0, 1.0, 48, 12)), lambda: X.torus(5, 1), _HICKS),
    Case("capsule-2", lambda: _one(S.capsule(1.0, 2.0, 32, 8)), lambda: X.capsule(1, 2), _TABLE),
    Case("capsule-5", lambda: _one(S.capsule(1.0, 5.0, 24, 6)), lambda: X.capsule(1, 5), _TABLE),
]

_ROUND_WITH_EDGES = [
    Case("cylinder-48", lambda: _one(S.cylinder(1.0, 2.0, 48)), lambda: X.solid_cylinder(1, 2), _TABLE),
    Case("cylinder-24", lambda: _one(S.cylinder(1.0, 2.0, 24)), lambda: X.solid_cylinder(1, 2), _TABLE),
    Case("coin", lambda: _one(S.cylinder(1.0, 0.2, 64)), lambda: X.solid_cylinder(1, 0.2), _TABLE),
    Case("rod", lambda: _one(S.cylinder(1.0, 10.0, 32)), lambda: X.solid_cylinder(1, 10), _TABLE),
    Case("hemisphere", lambda: _one(S.hemisphere(1.0, 32, 8)), lambda: X.hemisphere(1), _CAPS),
    Case("lens", lambda: _one(_caps(pi / 3, 32, 6)), lambda: X.two_cap_body(sin(pi / 3), pi / 3, pi / 3), _CAPS),
    Case("grown-balls", lambda: _one(_caps(0.75 * pi, 32, 10)), lambda: X.orthogonal_spheres(1, 1), _KELVIN),
]

_FLAT_FACED = [
    Case("cube", lambda: _one(S.cube(1.0)), lambda: X.regular_solid("cube"), "Helsing and Perfekt (2013)"),
    Case("cube-turned", lambda: _one(S.turned(S.cube(30.0), 0.7, (1, 2, 3))), lambda: 30 * X.CUBE, "as cube"),
    Case("block-112", lambda: _one(S.block(1.0, 1.0, 2.0)), lambda: X.block(1, 1, 2), _TABLE),
    Case("block-123", lambda: _one(S.block(1.0, 2.0, 3.0)), lambda: X.block(1, 2, 3), _TABLE),
    *(
        Case(name, lambda n=name: _one(S.regular_solid(n)), lambda n=name: X.regular_solid(n), _TABLE)  # type: ignore[misc]
        for name in ("tetrahedron", "octahedron", "dodecahedron", "icosahedron")
    ),
]

_SHEETS = [
    Case("plate", lambda: _one(S.plate(1.0, 1.0)), lambda: X.plate(1, 1), _TABLE),
    Case("plate-2", lambda: _one(S.plate(2.0, 1.0)), lambda: X.plate(2, 1), _TABLE),
    Case("plate-4", lambda: _one(S.plate(4.0, 1.0)), lambda: X.plate(4, 1), _TABLE),
    Case("disc-24", lambda: _one(S.disc(1.0, 24)), lambda: X.disc(1), "Kelvin (1847)"),
    Case("disc-48", lambda: _one(S.disc(1.0, 48)), lambda: X.disc(1), "Kelvin (1847)"),
    Case("disc-spokes", lambda: _one(S.disc(1.0, 96, fan="centre")), lambda: X.disc(1), "Kelvin (1847)"),
    Case("ellipse", lambda: _one(S.scaled(S.disc(1.0, 64), (2, 1, 1))), lambda: X.elliptic_disc(2, 1), _RF),
    Case("bowl-60", lambda: _one(S.bowl(1.0, pi / 3, 32, 6)), lambda: X.bowl(1, pi / 3), _KELVIN),
    Case("bowl-90", lambda: _one(S.bowl(1.0, pi / 2, 32, 8)), lambda: X.bowl(1, pi / 2), _KELVIN),
    Case("bowl-120", lambda: _one(S.bowl(1.0, 2 * pi / 3, 32, 10)), lambda: X.bowl(1, 2 * pi / 3), _KELVIN),
    Case("tube-ring", lambda: _one(S.tube(1.0, 0.5, 32)), lambda: X.open_tube(1, 0.5), _TABLE),
    Case("tube-2", lambda: _one(S.tube(1.0, 2.0, 48)), lambda: X.open_tube(1, 2), _TABLE),
    Case("tube-10", lambda: _one(S.tube(1.0, 10.0, 32)), lambda: X.open_tube(1, 10), _TABLE),
]

_PAIRS = [
    Case("balls-gap-1", lambda: _row((1, 1), (0, 3), 2), lambda: X.two_spheres(1, 1, 3), _SPHERES),
    Case("balls-unequal", lambda: _row((1, 2), (0, 4), 3), lambda: X.two_spheres(1, 2, 4), _SPHERES),
    Case("balls-gap-0.1", lambda: _row((1, 1), (0, 2.1), 3), lambda: X.two_spheres(1, 1, 2.1), _SPHERES),
    # The gap is 1 % of the diameter: the facets lie a third of it inside; then fine enough.
    Case("balls-gap-0.02", lambda: _row((1, 1), (0, 2.02), 3), lambda: X.two_spheres(1, 1, 2.02), _SPHERES),
    Case("balls-gap-0.02-fine", _close_balls, lambda: X.two_spheres(1, 1, 2.02), _SPHERES),
    # The coupling is 1e-4 of the self entries.
    Case("balls-far", lambda: _row((0.1, 0.1), (0, 1000), 2), lambda: X.two_spheres(0.1, 0.1, 1000), _SPHERES),
    Case("squares-0.1", lambda: _pair(S.plate(1.0, 1.0), 0.1), lambda: X.parallel_squares(1, 0.1), _TABLE),
    Case(
        "squares-0.05",
        lambda: _pair(S.plate(1.0, 1.0), 0.05),
        lambda: np.array([1.861900, -1.861900]),
        "computed on graded meshes, two discretisations agree to 1e-6",
        _charges((True, True), (0.5, -0.5)),
    ),
    Case("squares-0.5", lambda: _pair(S.plate(1.0, 1.0), 0.5), lambda: X.parallel_squares(1, 0.5), _TABLE),
    Case("squares-2", lambda: _pair(S.plate(1.0, 1.0), 2.0), lambda: X.parallel_squares(1, 2), _TABLE),
    Case(
        "squares-joined", lambda: _one(S.plate(), S.moved(S.plate(), z=0.2)), lambda: 2 * X.SQUARE_PAIRS[0.2][1], _TABLE
    ),
    Case("discs-1", lambda: _pair(S.disc(1.0, 32), 1.0), lambda: X.parallel_discs(1, 1), _LOVE),
    Case("discs-0.1", lambda: _pair(S.disc(1.0, 48), 0.1), lambda: X.parallel_discs(1, 0.1), _LOVE),
    # The gap is 1 % of the diameter.
    Case("discs-0.02", lambda: _pair(S.disc(1.0, 64), 0.02), lambda: X.parallel_discs(1, 0.02), _LOVE),
]

_ENCLOSURES = [
    Case("shell", lambda: _each(S.icosphere(1.0, 2), S.icosphere(2.0, 2)), lambda: X.shell_matrix(1, 2, 2), _SHELLS),
    Case(
        "shell-inward",
        lambda: _each(S.icosphere(1.0, 3), S.flipped(S.icosphere(2.0, 3))),
        lambda: X.shell_matrix(1, 2, 2),
        _SHELLS,
    ),
    Case(
        "shell-tight",
        lambda: _each(S.icosphere(1.0, 3), S.flipped(S.icosphere(1.1, 3))),
        lambda: X.shell_matrix(1, 1.1, 1.1),
        _SHELLS,
    ),
    Case(
        "eccentric",
        lambda: _each(S.moved(S.icosphere(1.0, 3), x=1.0), S.flipped(S.icosphere(3.0, 3))),
        lambda: _enclosed(X.eccentric_spheres(1, 3, 1), 3.0),
        "Smythe, Static and Dynamic Electricity (1968); derived again, see exact_pairs.py",
    ),
    Case(
        "ball-in-box",
        lambda: _each(S.icosphere(0.3, 3), S.cube(1.0)),
        lambda: _enclosed(X.sphere_in_cube(0.3, 1.0), X.CUBE),
        _TABLE,
    ),
    Case(
        "confocal",
        lambda: _each(S.ellipsoid((2.0, 1.0, 1.0), 3), S.ellipsoid(np.sqrt((5.0, 2.0, 2.0)), 3)),
        lambda: confocal_ellipsoids((2, 1, 1), 1),
        _RF,
    ),
]


def _enclosed(inner: float, outside: float) -> FloatArray:
    """Maxwell matrix of a conductor in a closed thin one, from the two parts."""
    return np.array([[inner, -inner], [-inner, inner + outside]])


def _mirrored(pair: FloatArray) -> FloatArray:
    """Charges of two alike at +1/2 and -1/2 V; nothing is said of a third one."""
    charge = 0.5 * (pair[0, 0] - pair[0, 1])
    return np.array([charge, -charge, np.nan])


_NETWORKS = [
    Case("row", lambda: _row((1, 0.5, 0.8), (0, 2, 4), 2), lambda: sphere_chain((1, 0.5, 0.8), (0, 2, 4)), _ROW),
    Case(
        "row-floating",
        lambda: _row((1, 0.5, 0.8), (0, 2, 4), 3),
        lambda: _reduced(sphere_chain((1, 0.5, 0.8), (0, 2, 4)), 1),
        _ROW,
        _floating(1),
    ),
    # The large ball shields the small ones: their coupling is a few 1e-3 of the self entries.
    Case(
        "row-shielded",
        lambda: _row((0.3, 1.2, 0.3), (0, 1.8, 3.6), 3),
        lambda: sphere_chain((0.3, 1.2, 0.3), (0, 1.8, 3.6)),
        _ROW,
    ),
    Case(
        "row-joined",
        lambda: S.surface([_ball(1.0, 0.0), [_ball(0.5, 2.0), _ball(0.8, 4.0)]]),
        lambda: _merged(sphere_chain((1, 0.5, 0.8), (0, 2, 4))),
        _ROW,
    ),
    Case(
        "row-of-four",
        lambda: _row((0.4,) * 4, (0, 1, 2.5, 6), 2),
        lambda: sphere_chain((0.4,) * 4, (0, 1, 2.5, 6)),
        _ROW,
    ),
    Case(
        "nested",
        lambda: _each(*(S.icosphere(r, 3) for r in (1.0, 1.5, 2.0))),
        lambda: nested_shells((1, 1.5, 2)),
        _SHELLS,
    ),
    Case(
        "nested-floating",
        lambda: _each(*(S.icosphere(r, 2) for r in (1.0, 1.5, 2.0))),
        lambda: nested_shells((1, 2)),
        _SHELLS,
        _floating(1),
    ),
    Case(
        "squares-with-third",
        lambda: _each(S.plate(), S.moved(S.plate(), z=0.2), S.moved(S.plate(), z=0.1)),
        lambda: _mirrored(X.parallel_squares(1, 0.2)),
        f"{_TABLE}; {_NULL}",
        _charges((True, True, False), (0.5, -0.5, 0.0)),
    ),
    Case(
        "balls-with-disc",
        lambda: _each(S.icosphere(1.0, 3), S.moved(S.icosphere(1.0, 3), z=3.0), S.moved(S.disc(2.0, 48), z=1.5)),
        lambda: _mirrored(X.two_spheres(1, 1, 3)),
        f"{_SPHERES}; {_NULL}",
        _charges((True, True, False), (0.5, -0.5, 0.0)),
    ),
]


def _at(mesh: Mesh, x: float = 0.0, z: float = 0.0) -> Mesh:
    return S.moved(mesh, x, 0.0, z)


def _rectangles(name: str, *meshes: Mesh, want: tuple[tuple[int, int], ...] | None = None) -> Case:
    """Conductors made of rectangles, in an attitude that favours no axis."""
    return Case(
        name,
        lambda: _each(*(S.turned(mesh, 0.6, (2, 1, 3)) for mesh in meshes)),
        lambda: rectangles(name),
        "graded collocation of a code of its own, see exact_rectangles.py",
        want=want,
    )


#: All of three conductors but the coupling of the outer ones, which thousands of panels would be spent on.
_NEIGHBOURS = ((0, 0), (1, 1), (2, 2), (0, 1), (1, 2))


def _bracket() -> Mesh:
    """Two unit squares that share an edge, at a right angle."""
    corners = np.array([(1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 0), (0, 1, 1), (0, 0, 1)], dtype=np.float64)
    return corners, np.array([(0, 1, 2), (0, 2, 3), (3, 2, 4), (3, 4, 5)], dtype=np.int64)


_SQUARE, _BOX = S.plate(), S.cube()
_ANGLES = [
    # 20 and 22 mm in proportion: the edges of the outer sheets lie over the middle one, just inside its rim.
    _rectangles("stacked", _at(_SQUARE, z=-0.1), S.plate(1.1, 1.1), _at(_SQUARE, z=0.1)),
    # The coupling through the sheet between is 3e-4 of the self entries.
    _rectangles("screened", _at(_SQUARE, z=-0.12), S.plate(4.0, 4.0), _at(_SQUARE, z=0.12), want=_NEIGHBOURS),
    _rectangles("coplanar", _at(_SQUARE, -0.55), _at(_SQUARE, 0.55)),
    _rectangles("offset", _SQUARE, _at(_SQUARE, 0.5, 0.2)),
    _rectangles(
        "leaning",
        _at(S.turned(S.plate(0.5, 2.0), -TILT, (0, 1, 0)), z=0.1 + 0.25 * sin(TILT)),
        S.plate(2.0, 3.0),
    ),
    _rectangles("strips", *(_at(S.plate(0.3, 2.0), x) for x in (-0.4, 0.0, 0.4))),
    Case(
        "bracket",
        lambda: _one(_bracket()),
        lambda: float(rectangles("bracket")[0, 0]),
        "graded collocation of a code of its own, see exact_rectangles.py",
    ),
    _rectangles("cubes", _at(_BOX, -0.55), _at(_BOX, 0.55)),
    _rectangles("cubes-in-row", _at(_BOX, -1.0), S.cube(0.5), _at(_BOX, 1.0)),
    _rectangles("box-over-sheet", _at(S.block(1.0, 1.0, 0.5), z=0.35), S.plate(2.0, 2.0)),
    # 20, 30 and 20 mm in proportion: a box in a closed one, and one beside.
    _rectangles("shielded", _BOX, S.cube(1.5), _at(_BOX, 1.75), want=_NEIGHBOURS),
]


def _ball(radius: float, x: float) -> Mesh:
    return S.moved(S.icosphere(radius, 2), x=x)


def _reduced(matrix: FloatArray, floating: int) -> FloatArray:
    """Schur complement, written out once more: independent of `daraf.bem.network`."""
    kept = np.delete(np.arange(len(matrix)), floating)
    column = matrix[kept, floating]
    return np.asarray(matrix[np.ix_(kept, kept)] - np.outer(column, column) / matrix[floating, floating])


def _merged(matrix: FloatArray) -> FloatArray:
    """The second and the third conductor joined."""
    join = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 1.0]])
    return np.asarray(join @ matrix @ join.T)


#: In an order that spreads the kinds: every third makes a fair sample.
CASES: tuple[Case, ...] = (
    *_SMOOTH,
    *_ROUND_WITH_EDGES,
    *_FLAT_FACED,
    *_SHEETS,
    *_PAIRS,
    *_ENCLOSURES,
    *_NETWORKS,
    *_ANGLES,
)
