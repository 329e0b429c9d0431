"""daraf against finite elements (scikit-fem) at a true error of 1e-3: the unit cube, and two unit plates 0.05 apart.

Three rivals, all with tetrahedra in space, elements of second (P2) or first order (P1), and at the outer boundary the
condition that the leading multipole obeys exactly (a charge around the cube, a dipole around the plates):

- *adaptive*: what corresponds to daraf's job, a coarse mesh of the whole space and no hints; residual estimator,
  Doerfler marking, bisection of the marked tetrahedra. Time of all passes, as for daraf.
- *by hand*: the whole space in a mesh made for this one shape (fem_meshes.py), which no mesher makes of a drawing.
- *by hand, an eighth*: likewise, with the three mirror planes that a person sees; daraf is told none of them.

The capacitance comes from the energy, to which the error goes squared. Conjugate gradients with the diagonal or with
algebraic multigrid (pyamg), whichever is faster there. The meshes by hand grow until they meet 1e-3, and only the one
that meets it counts: nobody pays for knowing which. Processor time, everything on one thread, the least of several
runs. Floor: 20 times faster. Needs ``pip install scikit-fem pyamg`` beside what the lock files name.
"""

import argparse
import logging
import sys
import time
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from accuracy import GAP, adaptive_runs, shape_list
from fem_meshes import Domain, cube_shells, plate_grid
from numpy.typing import NDArray
from scipy.sparse.linalg import LinearOperator, cg
from skfem import (
    Basis,
    BilinearForm,
    ElementTetP1,
    ElementTetP2,
    FacetBasis,
    Functional,
    InteriorFacetBasis,
    condense,
)
from skfem.helpers import dot, grad
from threadpoolctl import threadpool_limits

from daraf.bem import set_threads

FloatArray = NDArray[np.float64]

GOAL = 1e-3
FASTER = 20
ELEMENTS = {"P1": ElementTetP1, "P2": ElementTetP2}
#: Residual at which conjugate gradients stop: the energy then errs by its square.
RESIDUAL = 1e-6
#: Share of the estimate that the marked tetrahedra hold.
MARKED = 0.6
#: Beyond so many unknowns one run must do, without multigrid: on P2 that lost to the diagonal long before.
MOST_REPEATED = 100_000


@BilinearForm
def stiffness(u, v, w):
    """Energy product."""
    return dot(grad(u), grad(v))


@BilinearForm
def beyond(u, v, w):
    """Energy of what lies outside the outer boundary, for a potential that falls as the given power of r."""
    return w.decay * dot(w.x, w.n) / dot(w.x, w.x) * u * v


@Functional
def jump_residual(w):
    """Jump of the normal field across a facet, squared, times h."""
    return w.h * dot(grad(w["one"]) - grad(w["two"]), w.n) ** 2


@dataclass(frozen=True)
class Solved:
    """Capacitance over 4 pi eps of the whole space, potential, unknowns."""

    value: float
    potential: FloatArray
    unknowns: int
    basis: Basis
    held: NDArray[np.int64]


def solve(domain: Domain, order: str, multigrid: bool) -> Solved:
    """Assemble and solve."""
    mesh = domain.mesh
    basis = Basis(mesh, ELEMENTS[order]())
    outer = FacetBasis(mesh, basis.elem, facets=mesh.facets_satisfying(domain.outer, boundaries_only=True))
    matrix = stiffness.assemble(basis) + beyond.assemble(outer, decay=domain.decay)
    potential, held, facets = basis.zeros(), [], []
    for place, volts in domain.fixed:
        facets.append(mesh.facets_satisfying(place))
        held.append(basis.get_dofs(facets=facets[-1]).all())
        potential[held[-1]] = volts
    inner, load, _, free = condense(matrix, x=potential, D=np.unique(np.concatenate(held)))
    inner = inner.tocsr()
    if multigrid:
        from pyamg import ruge_stuben_solver

        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            precondition = ruge_stuben_solver(inner).aspreconditioner()
    else:
        inverse = 1.0 / inner.diagonal()
        precondition = LinearOperator(inner.shape, lambda r: inverse * r)
    found, info = cg(inner, load, rtol=RESIDUAL, M=precondition, maxiter=20_000)
    assert info == 0
    potential[free] = found
    value = float(potential @ (matrix @ potential)) / (4.0 * np.pi) / domain.share
    return Solved(value, potential, len(free), basis, np.concatenate(facets))


def estimate(solved: Solved) -> FloatArray:
    """Estimate of each tetrahedron by the jumps (Verfuerth, A Posteriori Error Estimation Techniques, 2013, ch. 1).

    The Laplacian inside is none for P1; the library has no second derivatives of P2, and the jumps mark well enough.
    """
    basis, mesh = solved.basis, solved.basis.mesh
    own = np.zeros(mesh.t.shape[1])
    inner = np.setdiff1d(np.flatnonzero(mesh.f2t[1] >= 0), solved.held)
    sides = [InteriorFacetBasis(mesh, basis.elem, facets=inner, side=side) for side in (0, 1)]
    one, two = (side.interpolate(solved.potential) for side in sides)
    jump = jump_residual.elemental(sides[0], one=one, two=two)
    for side in (0, 1):
        np.add.at(own, mesh.f2t[side, inner], 0.5 * jump)
    return own


def adaptive(domain: Domain, order: str, most: int) -> Iterator[Solved]:
    """Passes of refinement until the mesh holds more than `most` unknowns."""
    while True:
        solved = solve(domain, order, multigrid=False)
        yield solved
        if solved.unknowns > most:
            return
        own = estimate(solved)
        rank = np.argsort(-own)
        needed = int(np.searchsorted(np.cumsum(own[rank]), MARKED * own.sum())) + 1
        domain = replace(domain, mesh=domain.mesh.refined(rank[:needed]))


@dataclass(frozen=True)
class Rival:
    """One shape for finite elements: its exact value and its domain of size n, whole or an eighth."""

    reference: float
    domain: Callable[[int, bool], Domain]


def by_hand(rival: Rival, order: str, whole: bool, most: int) -> tuple[float, int, float, bool]:
    """Error, unknowns and seconds of the smallest mesh that meets the goal, and whether any does."""
    for n in range(2, 40):
        solved = solve(rival.domain(n, False), order, False)
        error = abs(solved.value / rival.reference - 1.0)
        if error <= GOAL or solved.unknowns > most:
            break
    times = []
    for multigrid in (False, True, False, False):
        if not times or solved.unknowns < MOST_REPEATED:
            start = time.process_time()
            solved = solve(rival.domain(n, whole), order, multigrid)
            times.append(time.process_time() - start)
    return abs(solved.value / rival.reference - 1.0), solved.unknowns, min(times), error <= GOAL


def without_hints(rival: Rival, order: str, most: int) -> tuple[float, int, float, bool]:
    """The same of the adaptive rival, over all its passes."""
    start = time.process_time()
    for solved in adaptive(rival.domain(1, True), order, most):
        error = abs(solved.value / rival.reference - 1.0)
        if error <= GOAL:
            break
    return error, solved.unknowns, time.process_time() - start, error <= GOAL


def report(orders: list[str], most: int) -> None:
    """Print the table."""
    shapes = {shape.name: shape for shape in shape_list()}
    rivals = {
        "cube": Rival(shapes["cube"].reference, lambda n, whole: cube_shells(n, whole=whole)),
        "plates, gap 0.05": Rival(
            shapes["plates, gap 0.05"].reference, lambda n, whole: plate_grid(n, GAP, whole=whole)
        ),
    }
    for name, rival in rivals.items():
        runs = adaptive_runs(shapes[name], tightest=5e-4, longest=10.0)
        kept = next(k for k in range(len(runs)) if all(run.error <= GOAL for run in runs[k:]))
        own = runs[kept]
        print(f"{name}: daraf off {own.error:.1e}, {own.unknowns} unknowns, {own.seconds:.3f} s over all passes")
        for order in orders:
            for title, result in (
                ("by hand, an eighth", lambda: by_hand(rival, order, False, most)),  # noqa: B023
                ("by hand", lambda: by_hand(rival, order, True, most)),  # noqa: B023
                ("adaptive", lambda: without_hints(rival, order, most)),  # noqa: B023
            ):
                error, unknowns, seconds, met = result()
                text = "" if met else "more than "
                print(
                    f"  {order} {title:18s}: off {error:.1e}, {unknowns:7d} unknowns, {seconds:7.2f} s, "
                    f"{text}{seconds / own.seconds:.0f} times as long (floor {FASTER})",
                    flush=True,
                )


def main() -> int:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--order", choices=list(ELEMENTS), nargs="+", default=["P2"], help="of the elements")
    parser.add_argument("--most", type=int, default=400_000, metavar="N", help="give up beyond so many unknowns")
    options = parser.parse_args()
    logging.getLogger("skfem").setLevel(logging.ERROR)  # it tells whenever it copies an array
    set_threads(1)
    with threadpool_limits(1):
        report(options.order, options.most)
    return 0


if __name__ == "__main__":
    sys.exit(main())
