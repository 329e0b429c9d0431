"""The reference values themselves: computed here again and compared with independent digits.

"Recomputed" below means a value worked out with 25 digits or more by a program separate from the functions
tested, which follows the source named beside it. Tolerances looser than `ROUNDING` are explained where they
stand.
"""

from math import pi, sqrt

import numpy as np
import pytest

from published import exact

ROUNDING = 4e-15  # some 20 roundings of double precision

BODIES = [
    # prolate and oblate spheroids: Maxwell, Treatise (1873) art. 151; Smythe (1968) chapter 5; recomputed
    (exact.prolate_spheroid(2, 1), 1.315190722204051),
    (exact.prolate_spheroid(10, 1), 3.324134179966797),
    (exact.oblate_spheroid(2, 1), 1.653986686265376),
    (exact.oblate_spheroid(10, 1), 6.765727460512015),
    # ellipsoid: NIST DLMF 19.33(ii); recomputed
    (exact.ellipsoid(3, 2, 1), 1.966009200709395),
    (exact.ellipsoid(1, 0.7, 0.4), 0.6913055278548787),
    # discs: Kelvin (1847); the ellipse is the limit of the ellipsoid; recomputed
    (exact.disc(1), 0.6366197723675813),
    (exact.elliptic_disc(2, 1), 0.9274219745722160),
    (exact.elliptic_disc(5, 1), 1.657763101499125),
    # bowls: Kelvin, Reprint of Papers (1872) article XV; recomputed
    (exact.bowl(1, pi / 3), 0.6089977810442294),
    (exact.bowl(1, pi / 2), 0.8183098861837907),
    (exact.bowl(1, 2 * pi / 3), 0.9423311143775627),
    # symmetric lens of two caps of radius 1: Macdonald, Proc. LMS 26 (1895) 156; recomputed
    (exact.two_cap_body(sqrt(0.75), pi / 3, pi / 3), 0.7009618943233420),
    (exact.hemisphere(1), 0.8452994616207485),
    # spheres cutting at a right angle: Maxwell art. 165-166; touching: art. 175; recomputed
    (exact.orthogonal_spheres(1, 1), 1.292893218813452),
    (exact.orthogonal_spheres(1, 2), 2.105572809000084),
    (exact.touching_spheres(1, 1), 1.386294361119891),
    (exact.touching_spheres(1, 2), 2.197224577336219),
    # torus: Hicks, Phil. Trans. 172 (1881) 609; Snow, NBS Circ. 544 (1954); recomputed
    (exact.torus(2, 1), 2.431670412453464),
    (exact.torus(3, 1), 3.091774367625124),
    (exact.torus(5, 1), 4.343551749463597),
    (exact.torus(10, 1), 7.216898804586920),
    (exact.torus(100, 1), 47.00310761414762),
]

PAIRS = [
    (exact.concentric_spheres(1, 2), 2.0),
    # eccentric spheres: bispherical coordinates, Smythe; Morse and Feshbach; recomputed
    (exact.eccentric_spheres(1, 3, 1), 1.606111526508759),
    # floating pairs and a sphere over a plane, from Maxwell's sums; recomputed
    (exact.pair_capacitance(exact.two_spheres(1, 1, 3)), 0.7676852544181265),
    (exact.pair_capacitance(exact.two_spheres(1, 2, 4)), 1.052774646531456),
    (exact.sphere_over_plane(1, 1.1), 2.155086117013238),
    (exact.sphere_over_plane(1, 1.5), 1.535370508836253),
    (exact.sphere_over_plane(1, 2), 1.341059813078430),
    (exact.sphere_over_plane(1, 5), 1.111236084013753),
    # closed ring-shaped can: separation of variables; recomputed
    (exact.coax_can(1, 2, 4), 2.246449378251876),
    (exact.coaxial_per_length(1, 2), 0.7213475204444817),
]

# Maxwell, Treatise (1873) art. 173; Lekner, Proc. R. Soc. A 468 (2012) 2829; recomputed: a, b, d, c11, c12
SPHERES = [
    (1, 1, 3, 1.146287441941130, -0.3890830668951228),
    (1, 2, 4, 1.205163277650618, -0.6119674674538999),
    (1, 1, 2.1, 1.583959303577357, -0.8835236098832143),
    (1, 1, 2.01, 2.136670826375420, -1.442786042250579),
]

# Love, QJMAM 2 (1949) 428; recomputed to 13 digits: distance, capacitance between discs of radius 1
DISCS = [
    (0.05, 5.4851577466052),
    (0.1, 2.9389807984745),
    (0.2, 1.6474962939202),
    (0.5, 0.85293515122129),
    (1, 0.57957386065061),
    (2, 0.44182279105552),
    (5, 0.36342173591556),
    (10, 0.33980030020898),
]


@pytest.mark.parametrize(("value", "reference"), BODIES + PAIRS)
def test_closed_forms_give_the_published_values(value: float, reference: float) -> None:
    # The digits quoted are 16: their own last place adds 1e-15.
    assert value == pytest.approx(reference, rel=ROUNDING, abs=0)


@pytest.mark.parametrize(("a", "b", "distance", "c11", "c12"), SPHERES)
def test_two_spheres_give_maxwell_sums(a: float, b: float, distance: float, c11: float, c12: float) -> None:
    matrix = exact.two_spheres(a, b, distance)
    # acosh near 1 magnifies the rounding of its argument: by 1/(cosh U - 1) = 100 at the closest pair.
    assert matrix[0] == pytest.approx([c11, c12], rel=1e-13, abs=0)
    assert matrix[0, 1] == matrix[1, 0]
    swapped = exact.two_spheres(b, a, distance)
    assert matrix == pytest.approx(swapped[::-1, ::-1], rel=ROUNDING, abs=0)


def test_unequal_spheres_second_entry() -> None:
    # Maxwell, Treatise (1873) art. 173; recomputed
    assert exact.two_spheres(1, 2, 4)[1, 1] == pytest.approx(2.327876126866757, rel=ROUNDING, abs=0)


@pytest.mark.parametrize(("distance", "reference"), DISCS)
def test_parallel_discs_capacitance(distance: float, reference: float) -> None:
    matrix = exact.parallel_discs(1, distance)
    # 13 digits are quoted; Gauss's points carry 3e-14, which the condition number of the equation (19 at the
    # smallest distance) magnifies.
    assert 0.5 * (matrix[0, 0] - matrix[0, 1]) == pytest.approx(reference, rel=1e-12, abs=0)
    assert exact.pair_capacitance(matrix) == pytest.approx(reference, rel=1e-12)


@pytest.mark.parametrize(
    ("distance", "own", "mutual"),
    [
        # Love (1949); recomputed
        (0.1, 3.1095575188786, -2.7684040780704),
        (0.5, 1.050333310134, -0.65553699230858),
        (1, 0.79959190286009, -0.35955581844113),
    ],
)
def test_parallel_discs_matrix(distance: float, own: float, mutual: float) -> None:
    # As above.
    assert exact.parallel_discs(1, distance)[0] == pytest.approx([own, mutual], rel=1e-12, abs=0)


def test_long_can_tends_to_the_infinite_line() -> None:
    # The difference of two lengths leaves the ends out; what remains falls as exp(-pi length/(b - a)).
    slope = 0.5 * (exact.coax_can(1, 2, 12) - exact.coax_can(1, 2, 10))
    assert slope == pytest.approx(exact.coaxial_per_length(1, 2), rel=1e-11)


def test_two_cap_body_covers_its_special_cases() -> None:
    # 30 digits inside: what is left is the rounding of the angles in double precision.
    cases = [
        (exact.two_cap_body(1, pi / 2, pi / 2), exact.sphere(1)),
        (exact.two_cap_body(1, 0, 0), exact.disc(1)),
        (exact.two_cap_body(1, pi / 2, 0), exact.hemisphere(1)),
        (exact.two_cap_body(1, pi / 2, -pi / 2), exact.bowl(1, pi / 2)),
        (exact.two_cap_body(sqrt(0.75), 2 * pi / 3, -2 * pi / 3), exact.bowl(1, 2 * pi / 3)),
        (exact.two_cap_body(sqrt(0.5), 3 * pi / 4, 3 * pi / 4), exact.orthogonal_spheres(1, 1)),
    ]
    for value, reference in cases:
        assert value == pytest.approx(reference, rel=ROUNDING, abs=0)


def test_limits_agree_with_each_other() -> None:
    assert exact.ellipsoid(2, 1, 1) == pytest.approx(exact.prolate_spheroid(2, 1), rel=ROUNDING)
    assert exact.ellipsoid(2, 2, 1) == pytest.approx(exact.oblate_spheroid(2, 1), rel=ROUNDING)
    assert exact.elliptic_disc(1, 1) == pytest.approx(exact.disc(1), rel=ROUNDING)
    # Offset 1e-5: the shift is of second order, and the poles lie 1e5 radii apart (4 digits lost).
    assert exact.eccentric_spheres(1, 2, 1e-5) == pytest.approx(exact.concentric_spheres(1, 2), rel=1e-9)
    (own, mutual), _ = exact.two_spheres(1, 1, 3)
    assert exact.sphere_over_plane(1, 1.5) == pytest.approx(own - mutual, rel=ROUNDING)


def test_shell_matrix_shields() -> None:
    matrix = exact.shell_matrix(1, 2, 3)
    assert matrix.sum(axis=1) == pytest.approx([0.0, 3.0], abs=ROUNDING)
    assert matrix[0, 1] == -exact.concentric_spheres(1, 2)


def test_parallel_squares_rows_make_the_matrix() -> None:
    matrix = exact.parallel_squares(2.0, 1.0)
    between, charge = exact.SQUARE_PAIRS[0.5]
    assert exact.pair_capacitance(matrix) == pytest.approx(2 * between, rel=ROUNDING)
    assert matrix[0].sum() == pytest.approx(2 * charge, rel=ROUNDING)
    # The closer, the more the pair looks like one plate; at any distance each has above half of its charge.
    charges = [0.5 * exact.plate(1, 1), *(row[1] for row in exact.SQUARE_PAIRS.values()), exact.plate(1, 1)]
    assert charges == sorted(charges)


def test_tables_lie_between_inscribed_and_circumscribed_bodies() -> None:
    # Capacitance grows with the body (a larger conductor contains the smaller one).
    assert exact.disc(1) < exact.solid_cylinder(1, 0.2) < exact.solid_cylinder(1, 20)
    for length, value in exact.SOLID_CYLINDERS.items():
        assert exact.open_tube(1, length) < value if length in exact.OPEN_TUBES else True
        assert value < exact.ellipsoid(sqrt(2), sqrt(2), length / sqrt(2))
    for half, value in exact.CAPSULES.items():
        assert exact.prolate_spheroid(half, 1) < value < exact.SOLID_CYLINDERS.get(2 * half, np.inf)
    for radius, value in exact.SPHERE_IN_CUBE.items():
        assert exact.concentric_spheres(radius, sqrt(0.75)) < value < exact.concentric_spheres(radius, 0.5)


@pytest.mark.parametrize("name", exact.REGULAR_SOLIDS)
def test_regular_solids_lie_between_their_spheres(name: str) -> None:
    # In- and circumradius of edge 1: Coxeter, Regular Polytopes (1973), table I; from memory.
    radii = {
        "tetrahedron": (sqrt(6) / 12, sqrt(6) / 4),
        "cube": (0.5, sqrt(0.75)),
        "octahedron": (sqrt(6) / 6, sqrt(0.5)),
        "dodecahedron": (1.1135163644, 1.4012585384),
        "icosahedron": (0.7557613141, 0.9510565163),
    }[name]
    assert radii[0] < exact.regular_solid(name) < radii[1]


@pytest.mark.parametrize(
    ("value", "reference"),
    [
        # Helsing and Perfekt (2013), from memory; computed 0.6606781542(3)
        (exact.regular_solid("cube", 2.0), 2 * 0.6606781542),
        # Hwang and Mascagni, J. Appl. Phys. 95 (2004) 3798: 0.6606782(1)
        (exact.block(1, 1, 1), 0.6606782),
        # computed to 1e-9; Read (1997) and Wintle (2004): about 0.3668
        (exact.plate(3, 3), 3 * 0.366788004),
        # scaling and the order of the sides
        (exact.plate(0.5, 1), 0.5 * 0.53191832173),
        (exact.block(3, 1, 2), 1.27578175040),
        (exact.capsule(2, 4), 2 * 1.421998047051),
        (exact.sphere_in_cube(0.6, 2), 2 * 0.63078217652174),
    ],
)
def test_tables_scale(value: float, reference: float) -> None:
    # 1e-7 is the error bar of the published value for the cube, the widest here.
    assert value == pytest.approx(reference, rel=1e-7)


def test_a_size_outside_a_table_is_refused() -> None:
    with pytest.raises(KeyError):
        exact.open_tube(1, 0.7)
