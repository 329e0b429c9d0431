"""Physics of daraf: arrays in, arrays out.

Example
-------
A sphere and a plate as triangle meshes in metres::

    surface = Surface(vertices, triangles, triangle_body, body_conductor=[0, 1])
    solution = solve_capacitance(surface, accuracy=0.005)
    solution.maxwell, solution.maxwell_uncertainty
"""

from .capacitance import solve_capacitance
from .constants import EPSILON_0
from .errors import DarafError, InputError, MemoryRefused, NumericalError
from .given_charge import ChargedBody, ChargedSurface, LineCharge, PointCharges, UniformField
from .images import HalfSpace, Images, MirrorPlane
from .jit import set_threads
from .load_response import LoadedExcitation, excite_with_loads, polarisability
from .losses import Admittance, admittance, complex_permittivity, conductance_by_duality
from .media import METAL, Media
from .media_solve import MediaSolution, solve_media
from .network import Excitation, MutualCapacitance, eliminate_floating, excite, mutual_capacitance
from .panels import Panels
from .solution import CapacitanceSolution, Notice, Pass
from .surface import Surface
from .terminals import Modes, Quantity, Terminals, terminals

__all__ = [
    "EPSILON_0",
    "METAL",
    "Admittance",
    "CapacitanceSolution",
    "ChargedBody",
    "ChargedSurface",
    "DarafError",
    "Excitation",
    "HalfSpace",
    "Images",
    "InputError",
    "LineCharge",
    "LoadedExcitation",
    "Media",
    "MediaSolution",
    "MemoryRefused",
    "MirrorPlane",
    "Modes",
    "MutualCapacitance",
    "Notice",
    "NumericalError",
    "Panels",
    "Pass",
    "PointCharges",
    "Quantity",
    "Surface",
    "Terminals",
    "UniformField",
    "admittance",
    "complex_permittivity",
    "conductance_by_duality",
    "eliminate_floating",
    "excite",
    "excite_with_loads",
    "mutual_capacitance",
    "polarisability",
    "set_threads",
    "solve_capacitance",
    "solve_media",
    "terminals",
]
