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
from .jit import set_threads
from .network import Excitation, MutualCapacitance, eliminate_floating, excite, mutual_capacitance
from .panels import Panels
from .solution import CapacitanceSolution, Notice, Pass
from .surface import Surface
from .terminals import Modes, Quantity, Terminals, terminals

__all__ = [
    "EPSILON_0",
    "CapacitanceSolution",
    "DarafError",
    "Excitation",
    "InputError",
    "MemoryRefused",
    "Modes",
    "MutualCapacitance",
    "Notice",
    "NumericalError",
    "Panels",
    "Pass",
    "Quantity",
    "Surface",
    "Terminals",
    "eliminate_floating",
    "excite",
    "mutual_capacitance",
    "set_threads",
    "solve_capacitance",
    "terminals",
]
