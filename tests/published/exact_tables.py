"""Capacitances without a closed form, as lengths c = C / (4 pi epsilon_0), for bodies of unit size.

Values are tables with their source beside them; a size that is not in a table raises KeyError. "Computed"
means: by a spectral or high-order code written for this project's tests, two discretisations of which agree
to the digits given.
"""

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "BLOCKS",
    "CAPSULES",
    "CUBE",
    "OPEN_TUBES",
    "PLATES",
    "REGULAR_SOLIDS",
    "SOLID_CYLINDERS",
    "SPHERE_IN_CUBE",
    "SQUARE_PAIRS",
    "block",
    "capsule",
    "open_tube",
    "parallel_squares",
    "plate",
    "regular_solid",
    "solid_cylinder",
    "sphere_in_cube",
]

FloatArray = NDArray[np.float64]

#: Cube of edge 1. Helsing and Perfekt, Appl. Comput. Harmon. Anal. 34 (2013) 445 (digits from memory);
#: computed: 0.6606781542(3); Hwang and Mascagni, J. Appl. Phys. 95 (2004) 3798: 0.6606782(1).
CUBE = 0.66067815409957

#: Platonic solids of edge 1, computed; two discretisations differ by at most 1e-9.
REGULAR_SOLIDS = {
    "tetrahedron": 0.35679725798,
    "cube": CUBE,
    "octahedron": 0.50945743445,
    "dodecahedron": 1.24647364003,
    "icosahedron": 0.81587043785,
}

#: Thin rectangles of sides (longer, 1), computed to 1e-9 (square) and 4e-8. The square is published as about
#: 0.3668: Read, J. Comput. Phys. 133 (1997) 1; Wintle, J. Electrostat. 62 (2004) 51 (from memory).
PLATES = {1.0: 0.366788004, 2.0: 0.53191832173, 4.0: 0.80932872222}

#: Rectangular blocks, edges sorted, computed; two discretisations differ by at most 1e-7.
BLOCKS = {(1.0, 1.0, 1.0): CUBE, (1.0, 1.0, 2.0): 0.86024024405, (1.0, 2.0, 3.0): 1.27578175040}

#: Thin open tube of radius 1: length -> c, computed from the one-dimensional equation with the logarithmic
#: kernel. Problem: Butler, J. Appl. Phys. 51 (1980) 5607; Scharstein, J. Electrostat. 65 (2007) 21.
OPEN_TUBES = {
    0.1: 0.544684175939582,
    0.2: 0.619245764265552,
    0.5: 0.756904972575802,
    1.0: 0.912177485949235,
    2.0: 1.15038246255299,
    3.0: 1.35335296067402,
    4.0: 1.53844221782749,
    5.0: 1.71177325340428,
    10.0: 2.47971142140578,
    20.0: 3.78866327632307,
    100.0: 11.85490242196,
}

#: Solid cylinder of radius 1 with flat ends: length -> c, computed to 10 digits or more. Problem: Smythe,
#: J. Appl. Phys. 27 (1956) 917 and 33 (1962) 2966.
SOLID_CYLINDERS = {
    0.2: 0.72936534243396,
    0.5: 0.82813666751648,
    1.0: 0.9639434281564,
    2.0: 1.1914985209056,
    3.0: 1.3904320801155,
    4.0: 1.5730412183122,
    10.0: 2.5077024370986,
    20.0: 3.8127761159082,
}

#: Cylinder with half balls as ends, radius 1: half of the overall length -> c, computed to 12 digits.
CAPSULES = {
    2.0: 1.421998047051,
    3.0: 1.773281904211,
    5.0: 2.389531466403,
    10.0: 3.711971571823,
    20.0: 5.98515621636,
}

#: Parallel unit squares: distance -> (capacitance between them, charge of each with both at 1 V over 4 pi
#: eps0), computed; two discretisations differ by at most 1e-8. Problem: Reitan, J. Appl. Phys. 30 (1959)
#: 172; Nishiyama and Nakamura, IEEE Trans. Compon. Packag. Manuf. Technol. A 17 (1994) 477.
SQUARE_PAIRS = {
    0.1: (1.03904481168, 0.20433859462),
    0.2: (0.61782238102, 0.21815490441),
    0.5: (0.35593847881, 0.24808494166),
    1.0: (0.26602625153, 0.28002211651),
    2.0: (0.22205656436, 0.31240467131),
}

#: Sphere at the centre of a closed grounded cube of side 1: radius -> c. Computed from lattice multipoles; a
#: least-squares harmonic fit on the cube's face agrees to 3e-13.
SPHERE_IN_CUBE = {
    0.2: 0.3074629727317,
    0.3: 0.63078217652174,
    0.35: 0.90268610957296,
    0.4: 1.3400781115589,
}


def regular_solid(name: str, edge: float = 1.0) -> float:
    """Platonic solid by its usual name."""
    return edge * REGULAR_SOLIDS[name]


def plate(length: float, width: float) -> float:
    """Thin rectangular plate; the ratio of its sides must be in `PLATES`."""
    short, long = sorted((length, width))
    return short * PLATES[long / short]


def block(x: float, y: float, z: float) -> float:
    """Rectangular block; its edges over the shortest must be in `BLOCKS`."""
    a, b, c = sorted((x, y, z))
    return a * BLOCKS[1.0, b / a, c / a]


def open_tube(radius: float, length: float) -> float:
    """Thin open tube; length over radius must be in `OPEN_TUBES`."""
    return radius * OPEN_TUBES[length / radius]


def solid_cylinder(radius: float, length: float) -> float:
    """Solid cylinder with flat ends; length over radius must be in `SOLID_CYLINDERS`."""
    return radius * SOLID_CYLINDERS[length / radius]


def capsule(radius: float, half_length: float) -> float:
    """Cylinder with half balls as ends, 2 `half_length` overall; the ratio must be in `CAPSULES`."""
    return radius * CAPSULES[half_length / radius]


def parallel_squares(edge: float, distance: float) -> FloatArray:
    """Maxwell matrix of two parallel thin squares; distance over edge must be in `SQUARE_PAIRS`.

    Opposite potentials give c11 - c12 = 2 x (capacitance between), equal ones c11 + c12 = charge per plate.

    Returns
    -------
    (2, 2) float
    """
    between, charge = SQUARE_PAIRS[distance / edge]
    own, mutual = edge * (between + 0.5 * charge), edge * (0.5 * charge - between)
    return np.array([[own, mutual], [mutual, own]])


def sphere_in_cube(radius: float, side: float) -> float:
    """Sphere at the centre of a closed grounded cube; radius over side must be in `SPHERE_IN_CUBE`."""
    return side * SPHERE_IN_CUBE[radius / side]
